-- Studies: a rig as a function of parameters, what to measure of it, and what is required.
--
-- lw.study { build, lasts = , runs = , seed = , given = {}, before = {}, after = {}, called = {} }
--   build   function(p, nominal) that returns a rig; p holds the parameters, reading another name
--           is an error
--   lasts   length of a run; runs: how many (default 1), numbered from 0; seed (default 1)
--   given   parameters and their values; `name=value` on the command line sets them. A value may be
--           a spread (lw.spread), drawn once a run
--   before, after   parameters that differ between the two variants compared on the same draws
--   called  { "constant", "recorded" }: names of the two variants
--   sweep   { name = { values }, ... } or a sweep (lw.sweep): the points at which it is run
--   keep    rows kept in a ledger: "all" (default), "failures" (of runs that fail), "counts"
--   stop_early   true: stop at a checkpoint (128 runs, 256, ...) where every verdict stands
--   title   one line for the head of the report
--
-- study:metric { "name", "kind", of = , ... }       the fields of a rig's metrics
-- study:metric { "name", of = , compute = , unit = }    of the study's own: latewood.own_metric
-- study:metric { "name", "fit", of = , measured = }      against measured data: latewood.measured
-- study:requirement { "name", "kind", of = , at_most = | at_least = , ... }
--   share, confidence   the share of runs that must meet the limit, shown at that confidence (95 %);
--           without a share every run must. Of a percentile, whose own share it is: of_runs
--   at_most_per_hour    instead of a limit: of a count, an hour of operation
-- study:budget { "parameter", from = , to = , whole = }   the largest value that meets all
-- study:figure { "title", of = , wanted = , band = , unit = , from = , to = , every = , note = }
--   of      a signal, or a list of at most 8: one panel each, the variants over one another
--   wanted  a signal or a number drawn with the first
--   band    { lo, hi }: lines across the first panel (any number of them), or a list of such lists
--   unit    what the first panel's numbers are in, or a list; shown, not converted
--   from, to   window; to may be called until, as elsewhere
--   every   time between the points, where those of the figure are too far apart
--   note    printed on the figure
--   measured   what lw.measured gives, drawn with the first signal, later by `shift`; a further panel
--           shows measured less run, and a note the fit. align: the time by which the data may be
--           moved further to lie closest to the last variant
-- study:figure { "title", fit = , note = }    what lw.plant.fit gives: data, model, residual
-- study:figure { "title", latency_of = loop, from = , to = , note = }
--   a histogram of a loop's times from sample to write

local lw = require "latewood"
local measured = require "latewood.measured"
local own = require "latewood.own_metric"
local sweep = require "latewood.sweep"
local trial = require "latewood.trial"
local words = require "latewood.words"

local study = {}
study.__index = study
study.__name = "study"
study.__metatable = false

local study_fields = { "lasts", "runs", "seed", "given", "before", "after", "called", "title", "sweep",
  "keep", "stop_early" }
local figure_fields = { "of", "wanted", "band", "unit", "from", "to", "until", "every", "note",
  "latency_of", "measured", "shift", "align", "fit" }

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

local function text_of(what, field, value)
  if value ~= nil and type(value) ~= "string" then
    fail("%s: %s is a %s; text is wanted", what, field, type(value))
  end
  return value
end

local function names_of_variants(called)
  if called == nil then return { "before", "after" } end
  if type(called) ~= "table" or #called ~= 2 then
    fail("study: called names the two variants: { \"before\", \"after\" }")
  end
  for i = 1, 2 do
    if type(called[i]) ~= "string" or called[i] == "" then
      fail("study: called: entry %d is no name", i)
    end
  end
  if called[1] == called[2] then fail("study: called: both names are \"%s\"", called[1]) end
  return called
end

-- The fields of lw.study { ... }, checked.
local function new(t)
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
  if t.sweep ~= nil and not sweep.points(t.sweep) then
    fail("study: sweep is %s; { name = { values } } or a sweep is wanted", tostring(t.sweep))
  end
  local keep = text_of("study", "keep", t.keep) or "all"
  if keep ~= "all" and keep ~= "failures" and keep ~= "counts" then
    fail("study: keep is \"%s\"; \"all\", \"failures\" or \"counts\" is wanted", keep)
  end
  local lasts = lw.quantity(t.lasts, "s")
  if not (lasts > 0 and lasts <= 9e6) then
    fail("study: lasts is %g s; above 0, at most 9e6 s is wanted", lasts)
  end
  return {
    build = t[1], lasts = lasts, title = text_of("study", "title", t.title),
    called = names_of_variants(t.called),
    runs = whole("study", "runs", t.runs, 1, 1000000) or 1,
    seed = whole("study", "seed", t.seed, 0, math.maxinteger) or 1,
    sweep = t.sweep, keep = keep, stop_early = t.stop_early == true,
    given = t.given or {}, before = t.before, after = t.after,
    metrics = {}, requirements = {}, figures = {}, origins = {},
  }
end

-- A limit: a number, or a quantity in the metric's unit.
local function limit_of(kind, value)
  if value == nil then return nil end
  local unit = words.units[kind]
  if type(value) == "number" then return lw.quantity(value) end
  if not unit and type(value) == "string" and value:find("%%%s*$") then unit = "1" end
  return lw.quantity(value, unit)
end

-- File and line of the study's own code that is at work, "" where there is none.
local function origin()
  local _, message = pcall(lw.fail, "")
  return message:gsub(":%s*$", "")
end

-- A metric of the engine. Two positional entries: a name and a kind in words; one serves as both.
local function engine_metric(what, t, skip)
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
  return def
end

local function add_metric(self, what, t, skip)
  if type(t) ~= "table" or type(t[1]) ~= "string" then fail("%s: its name is missing", what) end
  local def = own.is(t) and own.new(('%s "%s"'):format(what, t[1]), t, skip) or
    engine_metric(what, t, skip)
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

-- A share between 0 and 1, as a number or in percent.
local function share_of(name, field, value)
  if value == nil then return nil end
  local n = lw.quantity(value, "1")
  if not (n > 0 and n < 1) then
    fail("requirement \"%s\": %s is %s; between 0 and 1 (or 0 %% and 100 %%) is wanted", name, field,
      tostring(value))
  end
  return n
end

local function rate_of(name, value)
  if type(value) ~= "number" or not (value > 0) then
    fail("requirement \"%s\": at_most_per_hour is %s; a number above 0 is wanted", name,
      tostring(value))
  end
  return value
end

function study:requirement(t)
  local percentile = type(t) == "table" and tostring(t[2] or t[1]):find("percentile")
  local def = add_metric(self, "requirement", t, { at_most = true, at_least = true, of_runs = true,
    confidence = true, at_most_per_hour = true, share = not percentile })
  local stated = (t.at_most ~= nil and 1 or 0) + (t.at_least ~= nil and 1 or 0) +
    (t.at_most_per_hour ~= nil and 1 or 0)
  if stated ~= 1 then
    fail("requirement \"%s\": state one of at_most, at_least and at_most_per_hour", t[1])
  end
  self.requirements[#self.requirements + 1] = {
    name = t[1], kind = def[2],
    share = share_of(t[1], "share", t.of_runs or not percentile and t.share or nil),
    confidence = share_of(t[1], "confidence", t.confidence) or 0.95,
    per_hour = t.at_most_per_hour and rate_of(t[1], t.at_most_per_hour),
    limit_text = type(t.at_most or t.at_least) == "string" and (t.at_most or t.at_least) or nil,
    at_most = limit_of(def[2], t.at_most),
    at_least = limit_of(def[2], t.at_least),
  }
  return self
end

-- ---- figures

local MOST_PANELS, MOST_POINTS = 8, 100000

local function signals_of(what, of)
  if type(of) == "string" then of = { of } end
  if type(of) ~= "table" or #of < 1 or #of > MOST_PANELS then
    fail("%s: of is no signal and no list of 1 to %d signals", what, MOST_PANELS)
  end
  local seen = {}
  for i, name in ipairs(of) do
    if type(name) ~= "string" then fail("%s: of: entry %d is no name", what, i) end
    if seen[name] then fail("%s: of: \"%s\" stands there twice", what, name) end
    seen[name] = true
  end
  return of
end

-- Window of a figure within the run.
local function window_of(self, what, t)
  local from = t.from and lw.quantity(t.from, "s") or 0
  local till = t["until"] or t.to
  if t["until"] and t.to then fail("%s: to and until are the same; state one", what) end
  till = till and lw.quantity(till, "s") or self.lasts
  if from < 0 or till <= from or till > self.lasts then
    fail("%s: from is %.6g s and to %.6g s; permitted 0 to %.6g s, from before to", what, from,
      till, self.lasts)
  end
  return from, till
end

-- Lists of numbers, one a panel.
local function bands_of(what, band)
  if band == nil then return {} end
  if type(band) ~= "table" then fail("%s: band is a %s; { lo, hi } is wanted", what, type(band)) end
  if type(band[1]) ~= "table" then band = { band } end
  local bands = {}
  for i, lines in ipairs(band) do
    bands[i] = {}
    for k, value in ipairs(lines) do bands[i][k] = lw.quantity(value) end
  end
  return bands
end

local function every_of(what, every, from, till)
  if every == nil then return nil end
  local seconds = lw.quantity(every, "s")
  if not (seconds > 0 and (till - from) / seconds <= MOST_POINTS) then
    fail("%s: every is %.6g s; permitted %.6g s and above (%d points)", what, seconds,
      (till - from) / MOST_POINTS, MOST_POINTS)
  end
  return seconds
end

-- Measured data under a figure, and how far they may be moved.
local function overlay_of(f, what, t)
  if t.measured == nil then
    if t.shift ~= nil or t.align ~= nil then
      fail("%s: shift and align move measured data", what)
    end
    return
  end
  if not measured.is(t.measured) then
    fail("%s: measured is a %s; what lw.measured gives is wanted", what, type(t.measured))
  end
  local data = t.measured:shifted(t.shift or 0)
  f.data = measured.within(data, f.from, f.till)
  if f.data.n < 2 then
    fail("%s: %d rows of the measured data lie in its window; at least 2 are wanted", what,
      f.data.n)
  end
  if t.align ~= nil then
    f.align = lw.quantity(t.align, "s")
    if f.align <= 0 then fail("%s: align is %.6g s; above 0 is wanted", what, f.align) end
  end
end

local function fitted_of(what, t)
  for _, field in ipairs { "wanted", "band", "every", "measured", "shift", "align", "from", "to",
                           "until" } do
    if t[field] ~= nil then fail("%s: %s has no place beside fit", what, field) end
  end
  local fit = t.fit
  if type(fit) ~= "table" or type(fit.residual) ~= "table" or type(fit.measured) ~= "table" then
    fail("%s: fit is a %s; what lw.plant.fit gives is wanted", what, type(fit))
  end
  return { fit = fit, unit = t.unit, note = text_of(what, "note", t.note) }
end

local function response_of(self, what, t)
  local f = { of = signals_of(what, t.of), wanted = t.wanted, bands = bands_of(what, t.band),
    unit = t.unit, note = text_of(what, "note", t.note) }
  f.from, f.till = window_of(self, what, t)
  f.every = every_of(what, t.every, f.from, f.till)
  if f.wanted ~= nil and type(f.wanted) ~= "string" then f.wanted = lw.quantity(f.wanted) end
  overlay_of(f, what, t)
  if f.unit ~= nil and type(f.unit) ~= "table" then text_of(what, "unit", f.unit) end
  return f
end

local function latency_of(self, what, t)
  for _, field in ipairs { "wanted", "band", "unit", "every", "measured", "shift", "align" } do
    if t[field] ~= nil then fail("%s: %s has no place beside latency_of", what, field) end
  end
  local f = { latency_of = text_of(what, "latency_of", t.latency_of),
    note = text_of(what, "note", t.note) }
  f.from, f.till = window_of(self, what, t)
  return f
end

function study:figure(t)
  if type(t) ~= "table" or type(t[1]) ~= "string" then fail("figure: its title is missing") end
  local what = ("figure \"%s\""):format(t[1])
  known(what, t, figure_fields)
  local n = (t.of ~= nil and 1 or 0) + (t.latency_of ~= nil and 1 or 0) + (t.fit ~= nil and 1 or 0)
  if n ~= 1 then fail("%s: state one of of, latency_of and fit", what) end
  local f = t.fit ~= nil and fitted_of(what, t) or
    (t.of and response_of or latency_of)(self, what, t)
  f.title = t[1]
  self.figures[#self.figures + 1] = f
  return self
end

-- ---- running

-- Run the study. arguments: list of { name, text }; options: see latewood.trial.
-- Returns a table of results, or nil and a message.
function study:execute(arguments, options)
  return trial.execute(self, arguments, options)
end

local made = setmetatable({}, { __mode = "k" }) -- every study there is

-- What the program asks for: a study's own fields and methods may have been replaced since.
local module = {}

function module.is(value)
  return made[value] == true
end

function module.execute(self, arguments, options)
  return trial.execute(self, arguments, options)
end

return setmetatable({}, {
  __index = module,
  __newindex = function(_, name) fail("lw.study.%s is assigned; it stays", tostring(name)) end,
  __call = function(_, t)
    local self = setmetatable(new(t), study)
    made[self] = true
    return self
  end,
  __metatable = false,
})
