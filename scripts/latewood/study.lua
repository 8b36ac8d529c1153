-- Studies: a rig as a function of parameters, what to measure of it, and what is required.
--
-- lw.study { build, lasts = , runs = , seed = , given = {}, before = {}, after = {}, called = {} }
--   build   function(p, nominal) that returns a rig; p holds the parameters, reading another name
--           is an error
--   lasts   length of a run; runs: how many (default 1), numbered from 0; seed (default 1)
--   given   parameters and their values; `name=value` on the command line sets them
--   before, after   parameters that differ between the two variants compared on the same draws
--   called  { "constant", "recorded" }: names of the two variants
--   title   one line for the head of the report
--
-- study:metric { "name", "kind", of = , ... }       the fields of a rig's metrics
-- study:requirement { "name", "kind", of = , at_most = | at_least = , ... }
-- study:figure { "title", of = signal or list, wanted = signal, from = , until = , note = ,
--                unit = of the first signal, or a list }
-- study:figure { "title", latency_of = loop, note = }

local lw = require "latewood"

local study = {}
study.__index = study
study.__name = "study"

local study_fields = { "lasts", "runs", "seed", "given", "before", "after", "called", "title" }
local figure_fields = { "of", "wanted", "from", "until", "note", "unit", "latency_of" }

local function fail(format, ...)
  lw.fail(format:format(...))
end

local function known(what, t, names)
  for k in pairs(t) do
    if type(k) ~= "number" then
      local found = false
      for _, name in ipairs(names) do found = found or name == k end
      if not found then
        local near = lw.nearest(tostring(k), names)
        fail("%s: no field \"%s\"%s", what, tostring(k),
          near and ("; nearest \"%s\""):format(near) or "")
      end
    end
  end
end

local function whole(what, field, value, least, most)
  if value == nil then return nil end
  local n = math.tointeger(value)
  if type(value) ~= "number" or not n or n < least or n > most then
    fail("%s: %s is %s; a whole number from %d to %d is wanted", what, field, tostring(value),
      least, most)
  end
  return n
end

-- lw.study { ... }
local function new(_, t)
  if type(t) ~= "table" then fail("study: a table is wanted") end
  known("study", t, study_fields)
  if type(t[1]) ~= "function" then
    fail("study: the first entry is %s; the function that builds the rig is wanted", type(t[1]))
  end
  if t.lasts == nil then fail("study: lasts is missing; a time is wanted, such as \"20 ms\"") end
  for _, field in ipairs { "given", "before", "after" } do
    if t[field] ~= nil and type(t[field]) ~= "table" then
      fail("study: %s is %s; a table of parameters is wanted", field, type(t[field]))
    end
  end
  local lasts = lw.quantity(t.lasts, "s")
  if not (lasts > 0 and lasts <= 9e6) then
    fail("study: lasts is %g s; above 0, at most 9e6 s is wanted", lasts)
  end
  return setmetatable({
    build = t[1], lasts = lasts, title = t.title, called = t.called or { "before", "after" },
    runs = whole("study", "runs", t.runs, 1, 1000000) or 1,
    seed = whole("study", "seed", t.seed, 0, math.maxinteger) or 1,
    given = t.given or {}, before = t.before, after = t.after,
    metrics = {}, requirements = {}, figures = {}, origins = {},
  }, study)
end

-- A limit: a number, a quantity in any unit, or a percentage.
local function limit_of(value)
  if value == nil then return nil end
  if type(value) == "string" and value:find("%%%s*$") then return lw.quantity(value, "1") end
  return lw.quantity(value)
end

-- File and line of the study's own code that is at work, "" where there is none.
local function origin()
  local _, message = pcall(lw.fail, "")
  return message:gsub(":%s*$", "")
end

-- Two positional entries: a name and a kind in words; one serves as both.
local function add_metric(self, what, t, skip)
  if type(t) ~= "table" or type(t[1]) ~= "string" then fail("%s: its name is missing", what) end
  local kinds, def = lw.metric_kinds(), {}
  for k, v in pairs(t) do
    if not skip[k] then def[k] = v end
  end
  def[2] = t[2] or t[1]
  local is_kind = false
  for _, kind in ipairs(kinds) do is_kind = is_kind or kind == def[2] end
  if not is_kind then
    local near = lw.nearest(tostring(def[2]), kinds)
    fail("%s \"%s\": no metric is called \"%s\"%s", what, t[1], tostring(def[2]),
      near and ("; nearest \"%s\""):format(near) or "; there are: " .. table.concat(kinds, ", "))
  end
  for _, m in ipairs(self.metrics) do
    if m[1] == def[1] then fail("%s \"%s\": the name is taken", what, t[1]) end
  end
  self.metrics[#self.metrics + 1] = def
  self.origins[def[1]] = origin()
  return def
end

function study:metric(t)
  add_metric(self, "metric", t, {})
  return self
end

function study:requirement(t)
  local def = add_metric(self, "requirement", t, { at_most = true, at_least = true })
  if (t.at_most == nil) == (t.at_least == nil) then
    fail("requirement \"%s\": state one of at_most and at_least", t[1])
  end
  self.requirements[#self.requirements + 1] = {
    name = t[1], kind = def[2],
    limit_text = type(t.at_most or t.at_least) == "string" and (t.at_most or t.at_least) or nil,
    at_most = limit_of(t.at_most),
    at_least = limit_of(t.at_least),
  }
  return self
end

function study:figure(t)
  if type(t) ~= "table" or type(t[1]) ~= "string" then fail("figure: its title is missing") end
  known(("figure \"%s\""):format(t[1]), t, figure_fields)
  if (t.of == nil) == (t.latency_of == nil) then
    fail("figure \"%s\": state one of of and latency_of", t[1])
  end
  self.figures[#self.figures + 1] = {
    title = t[1], of = type(t.of) == "string" and { t.of } or t.of, wanted = t.wanted,
    from = t.from and lw.quantity(t.from, "s") or 0,
    till = t["until"] and lw.quantity(t["until"], "s") or self.lasts,
    note = t.note, unit = t.unit, latency_of = t.latency_of,
  }
  return self
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
function study:parameters(arguments, variant)
  local p = {}
  for k, v in pairs(self.given) do p[k] = v end
  for _, a in ipairs(arguments) do
    if self.given[a.name] == nil then
      local near = lw.nearest(a.name, sorted_names(self.given))
      return nil, ("the study has no parameter \"%s\"%s"):format(a.name,
        near and ("; nearest \"%s\""):format(near) or "")
    end
    if variant and variant[a.name] ~= nil then
      return nil, ("parameter \"%s\" is set by the study's variants; it cannot be set here too")
        :format(a.name)
    end
    p[a.name] = typed(a.text)
  end
  for k, v in pairs(variant or {}) do p[k] = v end
  return p
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
    __pairs = function() return next, p, nil end,
  })
end

function study:rig(p)
  local rig = self.build(guarded(p), guarded(p))
  if type(rig) ~= "userdata" then
    fail("the function that builds the rig returned %s; a rig is wanted",
      rig == nil and "nothing" or "a " .. type(rig))
  end
  return rig
end

-- ---- running

function study:variants()
  if self.before or self.after then
    return { { name = self.called[1], own = self.before or {} },
      { name = self.called[2], own = self.after or {} } }
  end
  return { { name = "run", own = nil } }
end

local POINTS = 2400 -- of a trace; drawn as the least and largest of each pixel column

-- Records the figures need, for the one run that is drawn.
function study:records()
  local records, seen = {}, {}
  local function add(key, record)
    if not seen[key] then records[#records + 1] = record end
    seen[key] = true
  end
  for i, f in ipairs(self.figures) do
    local every = math.max((f.till - f.from) / POINTS, 1e-12)
    for _, signal in ipairs(f.of or {}) do
      add(signal .. "\0" .. i, { signal, every = every, from = f.from, ["until"] = f.till })
    end
    if f.wanted then
      add(f.wanted .. "\0" .. i, { f.wanted, every = every, from = f.from, ["until"] = f.till })
    end
    if f.latency_of then add(f.latency_of, f.latency_of) end
  end
  return records
end

-- Take from a finished run what the figures show.
local function traces_of(self, run)
  local traces, next_record = {}, 0
  local recorded = {}
  for i, f in ipairs(self.figures) do
    local of = {}
    local function take(signal, key)
      if not recorded[key] then
        next_record = next_record + 1
        recorded[key] = run:record(next_record)
        recorded[key].csv = run:csv(next_record)
      end
      of[signal] = recorded[key]
    end
    for _, signal in ipairs(f.of or {}) do take(signal, signal .. "\0" .. i) end
    if f.wanted then take(f.wanted, f.wanted .. "\0" .. i) end
    if f.latency_of then take(f.latency_of, f.latency_of) end
    traces[i] = of
  end
  return traces
end

-- Call a method of a rig; what it says of a metric gets the line that asked for the metric.
function study:checked(f, ...)
  local results = table.pack(pcall(f, ...))
  if results[1] then return table.unpack(results, 2, results.n) end
  local message = tostring(results[2])
  local where = self.origins[message:match('^metric "(.-)":') or ""]
  error((where and where ~= "" and where .. ": " or "") .. message, 0)
end

local function run_variant(self, variant, arguments, options)
  local p, message = self:parameters(arguments, variant.own)
  if not p then return nil, message end
  local rig = self:rig(p)
  local result = { name = variant.name, parameters = p, values = {}, ended = {} }
  for _, m in ipairs(self.metrics) do result.values[m[1]] = {} end
  for i = 0, options.runs - 1 do
    local run = self:checked(rig.run, rig, { lasts = self.lasts, seed = options.seed, run = i,
      metrics = self.metrics, record = i == 0 and self:records() or nil })
    local status, why = run:status()
    if status == "LW_ERR_LAW" then error(why, 0) end -- the study is wrong, not the loop
    if status ~= "done" then
      result.ended[#result.ended + 1] = { run = i, status = status, message = why }
    end
    for _, m in ipairs(self.metrics) do
      result.values[m[1]][i + 1] = status == "done" and run:metric(m[1]) or 0 / 0
    end
    if i == 0 then result.traces = traces_of(self, run) end
  end
  return result
end

-- How one requirement stands in one variant.
local function judge(requirement, result, runs)
  local values, limit = result.values[requirement.name],
    requirement.at_most or requirement.at_least
  local ended, failed, unknown, worst, worst_run = {}, 0, 0, nil, nil
  for _, e in ipairs(result.ended) do ended[e.run] = true end
  for i = 1, runs do
    local v = values[i]
    local beyond = requirement.at_most and v > limit or requirement.at_least and v < limit
    local never = v ~= v and requirement.kind == "settling time"
    if ended[i - 1] or never or beyond then
      failed = failed + 1
    elseif v ~= v then
      unknown = unknown + 1
    end
    local further = worst == nil or v ~= v or
      (worst == worst and (requirement.at_most and v > worst or requirement.at_least and v < worst))
    if further and (worst == nil or worst == worst) then worst, worst_run = v, i - 1 end
  end
  return {
    verdict = failed > 0 and "not met" or unknown > 0 and "undecided" or "met",
    failed = failed, unknown = unknown, worst = worst, worst_run = worst_run,
  }
end

-- Run the study. arguments: list of { name, text }; options: seed, runs.
-- Returns a table of results, or nil and a message.
function study:execute(arguments, options)
  local out = { variants = {}, judged = {}, runs = options.runs or self.runs,
    seed = options.seed or self.seed, arguments = arguments }
  for i, variant in ipairs(self:variants()) do
    local result, message = run_variant(self, variant, arguments,
      { runs = out.runs, seed = out.seed })
    if not result then return nil, message end
    out.variants[i] = result
  end
  local rank = { met = 0, undecided = 1, ["not met"] = 2 }
  out.verdict = #self.requirements > 0 and "met" or nil
  for r, requirement in ipairs(self.requirements) do
    out.judged[r] = {}
    for v, result in ipairs(out.variants) do
      out.judged[r][v] = judge(requirement, result, out.runs)
    end
    local last = out.judged[r][#out.variants].verdict
    if rank[last] > rank[out.verdict] then out.verdict = last end
  end
  return out
end

function study.is(value)
  return getmetatable(value) == study
end

return setmetatable(study, { __call = new })
