-- The program's work on batches: run with many runs or points, and what is done with ledgers.

local lw = require "latewood"
local batch = require "latewood.batch"
local batch_report = require "latewood.batch_report"
local json = require "latewood.json"
local judge = require "latewood.judge"
local report = require "latewood.report"
local trial = require "latewood.trial"
local words = require "latewood.words"

local batch_command = {}

local OK, NOT_MET, UNDECIDED = 0, 1, 2
local USAGE, DATA, CANNOT_CREATE, IO, TRY_AGAIN, CONFIGURATION = 64, 65, 73, 74, 75, 78

-- Exit codes of the engine's statuses where a batch fails.
local codes = { LW_ERR_OUTPUT = IO, LW_ERR_DUPLICATE = CANNOT_CREATE, LW_ERR_INPUT = DATA,
  LW_ERR_ARGUMENT = CONFIGURATION, LW_ERR_PROCESS = TRY_AGAIN, LW_ERR_LAW = DATA,
  LW_ERR_MEMORY = 71 }

-- Whether a run of this study is a batch. Up to 64 runs without more to it are done at once, and each
-- value is listed.
function batch_command.wanted(study, options, runs)
  if runs > 64 or study.sweep or options["--ledger"] or options["--shard"] then return true end
  for _, q in ipairs(study.requirements) do
    if q.share or q.per_hour then return true end
  end
  return false
end

-- "K/N" of --shard: { number, of }; nil and a message where it is wrong.
local function shard_of(text)
  if text == nil then return nil end
  local k, n = text:match("^(%d+)/(%d+)$")
  k, n = math.tointeger(tonumber(k)), math.tointeger(tonumber(n))
  if not k or not n or n < 1 or n > 100000 or k >= n then
    return nil, ("option --shard is \"%s\"; K/N with K from 0 to N - 1 is wanted"):format(text)
  end
  return { number = k, of = n }
end

local function plan_of(host, study, p, settings, tools)
  local options = p.options
  local jobs, bad = tools.whole(options, "--jobs", 1, 64)
  if bad then return nil, bad, USAGE end
  local shard, wrong = shard_of(options["--shard"])
  if wrong then return nil, wrong, USAGE end
  if shard and not options["--ledger"] then
    return nil, "option --shard needs --ledger: a shard is a part of a ledger", USAGE
  end
  local plan, message = tools.guarded(batch.plan, study, p.pairs, { runs = settings.runs,
    seed = settings.seed, jobs = jobs or host.cores(), path = options["--ledger"], shard = shard,
    quiet = options["--quiet"] })
  if not plan then return nil, message, DATA end
  plan.jobs = math.min(plan.jobs, math.max(1, (plan.runs * #plan.points + 63) // 64))
  return plan
end

-- Say that the batch was stopped; the exit code.
local function stopped(host, plan, ledger, signal)
  local n = 0
  for number = 0, #plan.points - 1 do n = n + (ledger:tally(number, "runs") or 0) end
  ledger:close()
  host.err(("latewood: stopped by signal %d; %d of %d runs are %s\n"):format(signal, n,
    plan.runs * #plan.points, plan.path and "in " .. words.plain(plan.path) ..
    "; the same command goes on" or "lost; --ledger FILE would have kept them"))
  return 128 + signal
end

-- Figures and JSON of a batch into its folder: names of the files, or nil, message, exit code.
local function write_results(host, study, plan, ledger, verdict, folder, name, tools)
  local shown, why = tools.guarded(trial.shown, study, plan.points, plan.seed)
  if not shown then return nil, why, DATA end
  local pending, files = tools.contents(study, shown, name, function(all)
    return json.encode(batch_report.data(study, plan, ledger, verdict[1], verdict[2], name, all))
  end)
  for _, entry in ipairs(pending) do
    local done, message, code = host.write(folder, entry[1], entry[2]())
    if not done then return nil, message, code end
  end
  return files
end

local function print_results(host, study, plan, ledger, verdict, p, name, tools, folder)
  local options = p.options
  local judged, overall = verdict[1], verdict[2]
  if not options["--json"] and not options["--quiet"] then
    host.out(table.concat(batch_report.lines(study, plan, ledger, judged, overall, host.colour),
      "\n") .. "\n")
  end
  local files, trouble, kind = write_results(host, study, plan, ledger, verdict, folder, name, tools)
  if not files then return tools.complain(host, options, kind, trouble) end
  if options["--json"] then
    host.out(json.encode(batch_report.data(study, plan, ledger, judged, overall, name, files)))
  elseif options["--quiet"] then
    host.out((overall or "no requirement") .. ", of the model\n")
  else
    host.out(table.concat(report.closing(files, words.plain(folder), plan.path and
      ("latewood run %s --run N"):format(words.shell(p.file)) or
      ("latewood run %s --ledger FILE"):format(words.shell(p.file))), "\n") .. "\n")
  end
  return ({ met = OK, ["not met"] = NOT_MET, undecided = UNDECIDED })[overall or "met"]
end

-- latewood run, of a batch.
function batch_command.run(host, study, p, settings, tools)
  local options = p.options
  local plan, why, code = plan_of(host, study, p, settings, tools)
  if not plan then return tools.complain(host, options, code, why) end
  local ledger, result, extra = tools.guarded(batch.compute, host, study, plan)
  if not ledger then
    return tools.complain(host, options, codes[extra] or DATA, result)
  end
  if result == "stopped" then return stopped(host, plan, ledger, extra or 15) end
  if plan.shard then
    ledger:close()
    if not options["--quiet"] then
      host.out(("shard %d of %d is in %s; latewood merge puts shards together\n"):format(
        plan.shard.number, plan.shard.of, words.plain(plan.path)))
    end
    return OK
  end
  local folder = options["--out"] or p.file:gsub("%.lua$", "") .. "-results"
  local made, fault = host.make_folder(folder)
  if not made then return tools.complain(host, options, CANNOT_CREATE, fault) end
  local judged, verdict = judge.all(study, plan, ledger, plan.stage)
  local exit = print_results(host, study, plan, ledger, { judged, verdict }, p,
    tools.base_name(p.file), tools, folder)
  ledger:close()
  return exit
end

batch_command.codes = codes
batch_command.lw = lw

return batch_command
