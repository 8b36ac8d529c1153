-- Batches: every run of every point, computed by a crew of processes into a ledger.
--
-- 1. Rows depend on point and run alone; whatever is said of them is read from the ledger, in order
--    of run.
-- 2. A batch that stops early does so at fixed checkpoints only.
-- 3. The crew is started before the ledger is opened.

local lw = require "latewood"
local judge = require "latewood.judge"
local own = require "latewood.own_metric"
local own = require "latewood.own_metric"
local points = require "latewood.points"
local spread = require "latewood.spread"
local trial = require "latewood.trial"
local words = require "latewood.words"

local batch = {}

local FIRST_CHECKPOINT = 128
local CACHED = 64 -- points whose rig a worker keeps
local ENDED_EARLY = -9 -- status in the ledger where only its name is known: a value is not finite

-- ---- what is computed

-- Values by which two builds that compute differently are told apart: elementary functions over a
-- few thousand arguments.
local function fingerprint()
  local m, sum = lw.math, 0
  for k = 1, 2000 do
    local x = k * 0.0137
    sum = sum * 0.5 + m.sin(x) + m.exp(-x) + m.log(x) + m.atan(x) + m.sqrt(x)
  end
  return lw.number_text(sum)
end

-- Everything that decides what the rows are, in order.
function batch.facts(host, study, plan)
  local facts = {}
  local function add(section, name, value) facts[#facts + 1] = { section, name, value } end
  for _, input in ipairs(host.inputs()) do add(input[1], input[2], input[3]) end
  for _, a in ipairs(plan.arguments) do add("argument", a.name, a.text) end
  add("batch", "runs", tostring(plan.runs))
  add("batch", "seed", tostring(plan.seed))
  add("batch", "lasts", lw.number_text(study.lasts))
  add("batch", "points", tostring(#plan.points))
  add("batch", "stop early", tostring(study.stop_early))
  add("engine", "version", lw._VERSION)
  add("engine", "numerics", fingerprint())
  return facts
end

-- What a ledger of this study is like.
function batch.definition(host, study, plan, path)
  local metrics, limits = {}, {}
  for i, m in ipairs(study.metrics) do
    metrics[i] = { m[1], words.units[m[2]] or "" }
  end
  for _, q in ipairs(study.requirements) do
    local place
    for i, m in ipairs(study.metrics) do
      if m[1] == q.name then place = i end
    end
    if not q.per_hour then
      limits[#limits + 1] = { q.name, place, q.at_most or q.at_least,
        q.at_most and "at most" or "at least" }
    end
    limits[#limits + 1] = { q.name .. ": undefined", place, 0, "defined" }
  end
  return { path = path, keep = study.keep, facts = batch.facts(host, study, plan),
    metrics = metrics, limits = limits }
end

-- ---- in a worker

-- compute(point, run) for a crew: the row of one run.
local function computer(host, study, plan)
  local cache, order = {}, {}
  local function started(point, run)
    host.again()
    local rig = trial.rig(study, point.parameters, plan.seed, point.varies and run or nil)
    return trial.checked(study, rig.start, rig, { lasts = study.lasts, seed = plan.seed, run = run,
      metrics = own.engine(study), record = own.records(study) })
  end
  local function row_of(started_run, run)
    if not own.any(study) then return started_run:row(run) end
    return own.row(study, started_run, table.pack(started_run:row(run)))
  end
  local function in_full(point, run) -- metrics that the study computes itself
    host.again()
    local rig = trial.rig(study, point.parameters, plan.seed, run)
    local one, status, why, values = trial.one_run(study, rig, plan.seed, run, nil)
    local row = { status == "done" and 0 or ENDED_EARLY, one:now(), why or "" }
    for i, m in ipairs(study.metrics) do
      row[3 + i] = status == "done" and (values[m[1]] or one:metric(m[1])) or 0 / 0
    end
    one:close()
    return table.unpack(row)
  end
  local computes = #own.engine(study) < #study.metrics
  return function(number, run)
    local point = plan.points[number + 1]
    if computes then return in_full(point, run) end
    if point.varies then
      local alone = started(point, run)
      host.again()
      local row = table.pack(row_of(alone, run))
      alone:close()
      return table.unpack(row, 1, row.n)
    end
    if not cache[number] then
      if #order == CACHED then
        local oldest = table.remove(order, 1)
        cache[oldest]:close()
        cache[oldest] = nil
      end
      cache[number] = started(point, run)
      order[#order + 1] = number
    end
    host.again()
    return row_of(cache[number], run)
  end
end

-- ---- in the parent

local function mask_of(block, runs, shard)
  local mask = 0
  for k = 0, 63 do
    local run = block * 64 + k
    if run < runs and (not shard or run % shard.of == shard.number) then mask = mask | 1 << k end
  end
  return mask
end

-- Runs of a point up to which all are computed before anything is judged.
local function checkpoint(j, runs)
  return math.min(FIRST_CHECKPOINT << (j - 1), runs)
end

-- Work of the batch in order: an iterator that gives point, block, mask; nil where the blocks in
-- flight must come first. stage_done(): called when all blocks of a stage have come; true: no more.
local function work_list(ledger, plan, study, stage_done)
  local stage, in_flight = 1, 0
  local point, block, over = 0, 0, false
  local limit = study.stop_early and not plan.shard and checkpoint(1, plan.runs) or plan.runs
  local function next_block()
    while not over do
      while point < #plan.points do
        while block * 64 < limit do
          local done, why = ledger:done(point, block)
          if not done then error(why, 0) end
          local mask = mask_of(block, limit, plan.shard) & ~done
          block = block + 1
          if mask ~= 0 then
            in_flight = in_flight + 1
            return point, block - 1, mask
          end
        end
        point, block = point + 1, 0
      end
      if in_flight > 0 then return nil end
      if limit == plan.runs or stage_done(stage, limit) then
        over = true
        plan.computed = limit
        plan.stage = study.stop_early and not plan.shard and stage or nil
        return nil
      end
      stage, point, block = stage + 1, 0, 0
      limit = checkpoint(stage, plan.runs)
    end
  end
  return next_block, function() in_flight = in_flight - 1 end
end

local function count_done(ledger, plan)
  local n = 0
  for number = 0, #plan.points - 1 do n = n + (ledger:tally(number, "runs") or 0) end
  return n
end

local function open_ledger(host, study, plan, path)
  local def = batch.definition(host, study, plan, path)
  if not path then return host.ledger("resume", def) end
  if host.exists(path) then return host.ledger("resume", def) end
  return host.ledger("create", def)
end

-- Lines that tell how far the batch is, at most four a second.
local function reporter(host, plan, total, already)
  local shown = -1
  local began = host.clock()
  return function(done, failed)
    local now = host.clock()
    if not host.progress or plan.quiet or now - shown < 0.25 then return end
    shown = now
    local rate = (done - already) / math.max(now - began, 1e-9)
    local left = rate > 0 and (total - done) / rate or nil
    host.err(("\r\27[K%d of %d runs, %.0f a second%s%s"):format(done, total, rate,
      left and (", %.0f s left"):format(left) or "",
      failed > 0 and (", %d ended early"):format(failed) or ""))
  end, function()
    if host.progress and not plan.quiet then host.err("\r\27[K") end
  end
end

-- plan: runs, seed, arguments, points; jobs, path of the ledger or nil, shard { number, of } or nil,
-- quiet. Returns the ledger and "done" or "stopped" with the signal; or nil, message, status name.
function batch.compute(host, study, plan)
  local crew, why, kind = host.crew { jobs = plan.jobs, values = #study.metrics,
    compute = computer(host, study, plan) }
  if not crew then return nil, why, kind end
  local ledger
  ledger, why, kind = open_ledger(host, study, plan, plan.path)
  if not ledger then
    crew:close()
    return nil, why, kind
  end
  for _, point in ipairs(plan.points) do
    local done
    done, why, kind = ledger:point(point.number, point.name, point.text)
    if not done then
      crew:close()
      return nil, why, kind
    end
  end
  ledger:provenance("version", lw._VERSION)
  ledger:provenance("jobs", tostring(plan.jobs))
  ledger:provenance("began", host.date())
  local total, already = #plan.points * plan.runs, count_done(ledger, plan)
  local show, clear = reporter(host, plan, total, already)
  local done, ended = already, 0
  local next_block, came = work_list(ledger, plan, study, function(stage, limit)
    return judge.settled(study, plan, ledger, stage, limit)
  end)
  host.catch()
  local result
  result, why, kind = crew:work(ledger, next_block, function(number, block)
    came()
    done = done + 64
    if block % 16 == 0 then ended = math.max(ended, ledger:tally(number, "ended early") or 0) end
    return false
  end, function()
    show(math.min(done, total), ended)
    return host.interrupted() ~= nil
  end)
  local signal = host.interrupted()
  host.release()
  clear()
  plan.lost = crew:lost()
  crew:close()
  if not result then
    ledger:close()
    return nil, why, kind
  end
  plan.computed = plan.computed or plan.runs
  return ledger, result, signal
end

-- A batch at other points of the same study, by number from `first` on, into an open ledger: for
-- searches whose points depend on what came before.
function batch.plan(study, arguments, options)
  local list, message = points.of(study, arguments)
  if not list then return nil, message end
  local p = { arguments = arguments, points = list, runs = options.runs or study.runs,
    seed = options.seed or study.seed, jobs = options.jobs or 1, path = options.path,
    shard = options.shard, quiet = options.quiet }
  for _, point in ipairs(list) do p.varies = p.varies or spread.varies(point.parameters) end
  return p
end

return batch
