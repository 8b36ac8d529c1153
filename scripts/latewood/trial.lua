-- What becomes of a study: parameters of each variant, rigs built from them, runs, and how the
-- requirements stand.
--
-- 1. Variants are run with the same seed and run numbers, so that they see the same draws.
-- 2. Only the first run is recorded. A record changes no other byte of a run; where one is full, the run is
--    done again without.
-- 3. A requirement is met when every run meets it; a run that ended early meets none.

local lw = require "latewood"
local measured = require "latewood.measured"
local own = require "latewood.own_metric"
local spread = require "latewood.spread"

local trial = {}

local function fail(format, ...)
  lw.fail(format:format(...))
end

-- ---- parameters

-- A typed value of the command line: a number, true or false, or text (which may be a quantity).
local function typed(text)
  local n = tonumber(text)
  if n and not text:find("^%s*[-+]?0[xX]") and n == n and math.abs(n) ~= math.huge then return n end
  if text == "true" then return true end
  if text == "false" then return false end
  return text
end

local function sorted_names(t)
  local names = {}
  for k in pairs(t) do names[#names + 1] = tostring(k) end
  table.sort(names)
  return names
end

-- Parameters of a variant: given, then the command line, then before or after.
function trial.parameters(study, arguments, variant)
  local p = {}
  for k, v in pairs(study.given) do p[k] = v end
  for _, a in ipairs(arguments) do
    if study.given[a.name] == nil then
      local near = lw.nearest(a.name, sorted_names(study.given))
      return nil, ("the study has no parameter \"%s\"%s"):format(a.name,
        near and ("; nearest \"%s\""):format(near) or "")
    end
    if variant[a.name] ~= nil then
      return nil, ("parameter \"%s\" is set by the study's variants; it cannot be set here too")
        :format(a.name)
    end
    p[a.name] = typed(a.text)
  end
  for k, v in pairs(variant) do p[k] = v end
  return p
end

-- Walks a table in the order of its names.
local function sorted_pairs(p)
  local names, i = {}, 0
  for k in pairs(p) do names[#names + 1] = k end
  table.sort(names, function(a, b) return tostring(a) < tostring(b) end)
  return function()
    i = i + 1
    return names[i], p[names[i]]
  end
end

-- A view that raises when a name is read that is no parameter.
local function guarded(p)
  return setmetatable({}, {
    __index = function(_, name)
      local v = p[name]
      if v == nil then
        local near = lw.nearest(tostring(name), sorted_names(p))
        fail("the study gives no parameter \"%s\"%s", tostring(name),
          near and ("; nearest \"%s\""):format(near) or "")
      end
      return v
    end,
    __newindex = function(_, name)
      fail("parameter \"%s\" is assigned; a rig is built, its parameters stay", tostring(name))
    end,
    __pairs = function() return sorted_pairs(p), nil, nil end,
    __metatable = false,
  })
end

-- The rig at parameters p, of which some may be spreads: as drawn for a run of the seed, or (run nil)
-- at their medians.
function trial.rig(study, p, seed, run)
  local nominal = spread.nominal(p)
  local rig = study.build(guarded(run and spread.drawn(p, seed, run) or nominal), guarded(nominal))
  if type(rig) ~= "userdata" then
    fail("the function that builds the rig returned %s; a rig is wanted",
      rig == nil and "nothing" or "a " .. type(rig))
  end
  return rig
end

function trial.variants(study)
  if study.before or study.after then
    return { { name = study.called[1], own = study.before or {} },
      { name = study.called[2], own = study.after or {} } }
  end
  return { { name = "run", own = {} } }
end

-- ---- records

-- Points of a trace where the figure states no distance: five a column of pixels, of which the
-- least and largest are drawn. 6000 over the golden ratio: windows and periods are round numbers,
-- and so no point falls in step with a clock and hides its ripple.
local POINTS = 3708

local function trace_record(f, signal)
  local every = f.every or (f.till - f.from) / POINTS
  every = math.max(math.floor(every * 1e12 + 0.5), 1) / 1e12 -- whole picoseconds
  return { signal, every = every, from = f.from, ["until"] = f.till }
end

-- What the figures need of a run: list of { record, signal, figure }. A loop is recorded once.
local function wanted_records(study)
  local list, loops = {}, {}
  local function add(i, signal, record)
    list[#list + 1] = { record = record, signal = signal, figures = { i } }
    return list[#list]
  end
  for i, f in ipairs(study.figures) do
    local seen = {}
    for _, signal in ipairs(f.of or {}) do
      add(i, signal, trace_record(f, signal))
      seen[signal] = true
    end
    if f.data and not f.align then add(i, measured.ROWS, measured.entry(f.data, f.of[1])) end
    if type(f.wanted) == "string" and not seen[f.wanted] then
      add(i, f.wanted, trace_record(f, f.wanted))
    end
    local loop = f.latency_of
    if loop and loops[loop] then
      table.insert(loops[loop].figures, i)
    elseif loop then
      loops[loop] = add(i, loop, loop)
    end
  end
  return list
end

function trial.records(study)
  local records = {}
  for i, w in ipairs(wanted_records(study)) do records[i] = w.record end
  return records
end

-- traces[figure][signal]: the record, with its text as CSV.
local function traces_of(study, run)
  local traces = {}
  for i in ipairs(study.figures) do traces[i] = {} end
  for place, w in ipairs(wanted_records(study)) do
    local record = run:record(place)
    record.csv = function() return run:csv(place) end
    for _, i in ipairs(w.figures) do traces[i][w.signal] = record end
  end
  return traces
end

-- ---- running

-- Call a method of a rig; what it says of a metric gets the line that asked for the metric.
function trial.checked(study, f, ...)
  local results = table.pack(pcall(f, ...))
  if results[1] then return table.unpack(results, 2, results.n) end
  if type(results[2]) ~= "string" then error(results[2], 0) end
  local message = results[2]
  local asker = own.asker(study, message:match('^record[^"]*"(.-)"'))
  if asker then message = ('metric "%s": %s'):format(asker[1], message) end
  local where = study.origins[message:match('^metric "(.-)":') or ""]
  error((where and where ~= "" and where .. ": " or "") .. message, 0)
end

-- Returns run, status, why, and the values of the study's own metrics by name.
local function one_run(study, rig, seed, number, records)
  local run = trial.checked(study, rig.run, rig, { lasts = study.lasts, seed = seed, run = number,
    metrics = own.engine(study), record = own.records(study, records) })
  local status, why = run:status()
  if status == "LW_ERR_LAW" then error(why, 0) end -- the study is wrong, not the loop
  local values = status == "done" and own.values(study, run, records) or {}
  return run, status, why, values
end

-- Run 0 with what the figures need. Returns what one_run does, then the traces, and where these end
-- too early the time at which they do.
local function first_run(study, rig, seed, number)
  local records = trial.records(study)
  local run, status, why, values = one_run(study, rig, seed, number, records)
  local traces = traces_of(study, run)
  if status ~= "LW_ERR_CAPACITY" or #records == 0 then return run, status, why, values, traces end
  local cut = run:now()
  run, status, why, values = one_run(study, rig, seed, number, nil)
  return run, status, why, values, traces, status == "done" and cut or nil
end

trial.one_run = one_run

-- What the figures show of a batch: run 0 of each variant at the first point, as a result without
-- values.
function trial.shown(study, points, seed)
  local out, seen = { variants = {}, judged = {}, runs = 1, seed = seed }, {}
  for _, point in ipairs(points) do
    if not seen[point.variant] then
      seen[point.variant] = true
      local rig = trial.rig(study, point.parameters, seed, 0)
      local run, status, why, _, traces, cut = first_run(study, rig, seed, 0)
      out.variants[#out.variants + 1] = { name = point.variant, parameters = point.parameters,
        values = {}, traces = traces, cut = cut, ended = status ~= "done" and { { run = 0,
          status = status, message = why, at = run:now() } } or {} }
    end
  end
  return out
end

local function run_variant(study, variant, arguments, options)
  local p, message = trial.parameters(study, arguments, variant.own)
  if not p then return nil, message end
  options.again()
  local varies, rig = spread.varies(p), nil
  local result = { name = variant.name, parameters = p, values = {}, ended = {} }
  for _, m in ipairs(study.metrics) do result.values[m[1]] = {} end
  for i = 0, options.runs - 1 do
    options.again()
    options.progress(variant.name, i, options.runs)
    if varies or not rig then
      if rig then options.again() end
      rig = trial.rig(study, p, options.seed, options.first + i)
    end
    local run, status, why, values
    if i == 0 then
      run, status, why, values, result.traces, result.cut =
        first_run(study, rig, options.seed, options.first)
    else
      run, status, why, values = one_run(study, rig, options.seed, options.first + i, nil)
    end
    if status ~= "done" then
      result.ended[#result.ended + 1] = { run = options.first + i, status = status, message = why,
        at = run:now() }
    end
    for _, m in ipairs(study.metrics) do
      result.values[m[1]][i + 1] = status == "done" and (values[m[1]] or run:metric(m[1])) or 0 / 0
    end
  end
  return result
end

-- ---- judging

-- What a value that is no number means, by the kind of its metric.
local undefined = { ["settling time"] = "never settled", ["rise time"] = "never reached" }

function trial.undefined(kind)
  return undefined[kind] or "undefined"
end

-- How bad a run is: 4 ended early, 3 never settled, 2 beyond the limit, 1 unknown, 0 fine.
local function badness(requirement, v, ended)
  if ended then return 4 end
  if v ~= v then return requirement.kind == "settling time" and 3 or 1 end
  if requirement.at_most then return v > requirement.at_most and 2 or 0 end
  return v < requirement.at_least and 2 or 0
end

local function further(requirement, v, than)
  if requirement.at_most then return v > than end
  return v < than
end

-- How one requirement stands in one variant.
local function judge(requirement, result, runs, first)
  local values = result.values[requirement.name]
  local ended, n, worst_run, worst_badness = {}, { 0, 0, 0, 0, [0] = 0 }, 0, -1
  for _, e in ipairs(result.ended) do ended[e.run - first] = true end
  for i = 0, runs - 1 do
    local v, worst = values[i + 1], values[worst_run + 1]
    local bad = badness(requirement, v, ended[i])
    n[bad] = n[bad] + 1
    if bad > worst_badness or bad == worst_badness and further(requirement, v, worst) then
      worst_run, worst_badness = i, bad
    end
  end
  local failed = n[2] + n[3] + n[4]
  local reasons = { trial.undefined(requirement.kind), "beyond the limit",
    trial.undefined(requirement.kind), "ended early" }
  return {
    verdict = failed > 0 and "not met" or n[1] > 0 and "undecided" or "met",
    reason = reasons[worst_badness], failed = failed, unknown = n[1],
    worst = values[worst_run + 1], worst_run = first + worst_run,
    worst_ended = ended[worst_run] or false,
  }
end

local function nothing() end

-- Run the study. arguments: list of { name, text }. options: seed, runs; again(), called where a
-- new stretch of the study's own code begins; progress(variant, run, runs); first: number of the
-- first run (0), the one that is recorded.
-- Returns a table of results, or nil and a message.
function trial.execute(study, arguments, options)
  local out = { variants = {}, judged = {}, runs = options.runs or study.runs,
    seed = options.seed or study.seed, arguments = arguments, first = options.first or 0 }
  for i, variant in ipairs(trial.variants(study)) do
    local result, message = run_variant(study, variant, arguments, { runs = out.runs,
      seed = out.seed, first = out.first, again = options.again or nothing, progress = options.progress or nothing })
    if not result then return nil, message end
    out.variants[i] = result
  end
  local rank = { met = 0, undecided = 1, ["not met"] = 2 }
  out.verdict = #study.requirements > 0 and "met" or nil
  for r, requirement in ipairs(study.requirements) do
    out.judged[r] = {}
    for v, result in ipairs(out.variants) do
      out.judged[r][v] = judge(requirement, result, out.runs, out.first)
    end
    local last = out.judged[r][#out.variants].verdict
    if rank[last] > rank[out.verdict] then out.verdict = last end
  end
  -- No failure in n runs: at 95 % confidence a share below 3/n of runs fails (rule of three).
  if out.verdict == "met" and out.runs > 1 then out.failing_below = math.min(1, 3 / out.runs) end
  return out
end

return trial
