-- Metrics of a study's own: a function over records of a run, called after it.
--
-- study:metric { "name", of = , unit = , compute = function(record, ...) return number end }
--   of       what is recorded for it: an adc, dac, loop, task or comparator by its name (every
--            event), a record entry { "axis.speed", every = "10 us" }, or a list of these; compute
--            gets one record each, as run:record gives it
--   unit     "s", "A", ...; "%": compute returns a share, shown in percent; nothing: plain numbers
--   compute  returns a number, or nil where there is none (the value is then undefined)
-- study:metric { "name", kind, of = signal, measured = data, shift = 0 }
--   kind     "fit", "residual rms" or "residual peak" (latewood.measured), against measured data;
--            the signal is taken at the very instants of the data, later by the shift
--
-- 1. compute sees records only; it is called once a run that reached its end, in order of
--    definition. It must give the same for the same records.
-- 2. Records change no other byte of a run.

local lw = require "latewood"
local words = require "latewood.words"

local own = {}

local fields = { "of", "unit", "compute" }
local fit_fields = { "of", "measured", "shift" }
local kinds = { "fit", "residual rms", "residual peak" }

local function fail(format, ...)
  lw.fail(format:format(...))
end

local function known(what, t, names, more)
  for k in pairs(t) do
    local found = type(k) == "number" and k <= 2 or more[k]
    for _, name in ipairs(names) do found = found or k == name end
    if not found then
      local near = lw.nearest(tostring(k), names)
      fail("%s: no field \"%s\"%s", what, tostring(k), near and ("; nearest \"%s\""):format(near) or
        "")
    end
  end
end

-- Whether a table given to study:metric is one of a study's own.
function own.is(t)
  return t.compute ~= nil or t.measured ~= nil
end

local function is_entry(e)
  return type(e) == "string" or type(e) == "table" and type(e[1]) == "string"
end

local function entries_of(what, of)
  local list = of
  if type(of) == "string" then list = { of } end
  if type(list) == "table" then
    for k in pairs(list) do
      if type(k) == "string" then list = { of } end
    end
  end
  if type(list) ~= "table" or #list < 1 then
    fail("%s: of is %s; a name, { signal, every = time } or a list of these is wanted", what,
      of == nil and "missing" or "a " .. type(of))
  end
  for i, e in ipairs(list) do
    if not is_entry(e) then fail("%s: of: entry %d names nothing to record", what, i) end
  end
  return list
end

local function unit_of(what, unit)
  if unit == nil then return "" end
  if type(unit) ~= "string" or unit == "" or #unit > 20 then
    fail("%s: unit is %s; a text such as \"A\" is wanted", what, tostring(unit))
  end
  return unit
end

local function computed(what, t, more)
  known(what, t, fields, more)
  if t[2] ~= nil then
    fail("%s: a kind (\"%s\") and compute are stated; one is wanted", what, tostring(t[2]))
  end
  if type(t.compute) ~= "function" then
    fail("%s: compute is a %s; a function of records is wanted", what, type(t.compute))
  end
  local unit = unit_of(what, t.unit)
  return { t[1], words.own_kind(unit), records = entries_of(what, t.of), compute = t.compute }
end

local function compared(what, t, more)
  known(what, t, fit_fields, more)
  local kind, is_kind = t[2] or t[1], false
  for _, k in ipairs(kinds) do is_kind = is_kind or k == kind end
  if not is_kind then
    fail("%s: against measured data there are %s; not \"%s\"", what, table.concat(kinds, ", "),
      tostring(kind))
  end
  local measured = require "latewood.measured"
  if not measured.is(t.measured) then
    fail("%s: measured is a %s; what lw.measured gives is wanted", what, type(t.measured))
  end
  if type(t.of) ~= "string" then fail("%s: of is no signal", what) end
  local data = t.measured:shifted(t.shift or 0)
  return { t[1], kind, records = { measured.entry(data, t.of) },
    compute = function(record) return measured.compare(kind, data, record.value) end }
end

-- The checked metric of table t; `more`: further fields that are known.
function own.new(what, t, more)
  return (t.compute ~= nil and computed or compared)(what, t, more)
end

-- ---- of a whole study

function own.any(study)
  for _, m in ipairs(study.metrics) do
    if m.compute then return true end
  end
  return false
end

-- The metrics that the engine takes.
function own.engine(study)
  local list = {}
  for _, m in ipairs(study.metrics) do
    if not m.compute then list[#list + 1] = m end
  end
  return list
end

-- What must be recorded in every run, after `records`, and the places of each metric's records. The
-- events of one thing are recorded once.
local function plan(study, records)
  local list, places, events = table.move(records or {}, 1, #(records or {}), 1, {}), {}, {}
  for k, entry in ipairs(list) do
    if type(entry) == "string" then events[entry] = k end
  end
  for _, m in ipairs(study.metrics) do
    places[m] = {}
    for k, entry in ipairs(m.records or {}) do
      local place = type(entry) == "string" and events[entry] or #list + 1
      list[place], places[m][k] = entry, place
      if type(entry) == "string" then events[entry] = place end
    end
  end
  return list, places
end

function own.records(study, records)
  local list = plan(study, records)
  return #list > 0 and list or nil
end

-- Values by name, from a run that was recorded with `records` before.
function own.values(study, run, records)
  local _, places = plan(study, records)
  local values = {}
  for _, m in ipairs(study.metrics) do
    if m.compute then
      local own_records = {}
      for k, place in ipairs(places[m]) do own_records[k] = run:record(place) end
      local value = m.compute(table.unpack(own_records))
      if value ~= nil and type(value) ~= "number" then
        fail("metric \"%s\": compute returned a %s; a number is wanted", m[1], type(value))
      end
      values[m[1]] = value or 0 / 0
    end
  end
  return values
end

-- The row of a run as a ledger takes it: status, instant, message, then every metric in order.
function own.row(study, run, row)
  local out, taken = { row[1], row[2], row[3] }, 3
  local values = row[1] == 0 and own.values(study, run) or {}
  for i, m in ipairs(study.metrics) do
    if m.compute then
      out[3 + i] = values[m[1]] or 0 / 0
    else
      taken = taken + 1
      out[3 + i] = row[taken]
    end
  end
  return table.unpack(out, 1, 3 + #study.metrics)
end

-- The metric for which a record of this name is kept, or nil.
function own.asker(study, name)
  for _, m in ipairs(study.metrics) do
    for _, e in ipairs(m.records or {}) do
      if (type(e) == "string" and e or e[1]) == name then return m end
    end
  end
  return nil
end

-- Lines for a person.
function own.describe(study)
  local lines = {}
  for _, m in ipairs(study.metrics) do
    if m.compute then
      local names = {}
      for k, e in ipairs(m.records) do
        names[k] = ('"%s"'):format(type(e) == "string" and e or e[1])
      end
      lines[#lines + 1] = ('metric "%s": %s, of %s, computed after each run'):format(m[1], m[2],
        table.concat(names, ", "))
    end
  end
  return lines
end

return own
