-- Measured signals: columns of a CSV file, laid over runs and compared with them.
--
-- lw.measured { "step.csv", time = "t", value = "speed", ... }    or time = {..}, value = {..}
--   time, value   columns by the header's name or by number; or lists of numbers
--   every         time between rows, where the file has no time column (rows then begin at 0)
--   time_unit     unit of bare numbers in the time column: "s" unless stated
--   scale         each value is taken times this (1)
--   unit          what the values are in; shown
--   decimal       "." (default) or ","; separator: found unless stated as ",", ";" or "tab"
--   from, to      only rows within these times
--   shift         added to every time (0)
-- Returns a measured signal: fields n, time, value, unit, name; m:shifted(t), m:at(t).
--
-- 1. Times rise from row to row. Between rows m:at draws straight lines; nil outside.
-- 2. fit = 1 - |y - x| / |y - mean of y| over all rows (Euclidean norms; y measured, x of the run):
--    1 where they agree, 0 where the mean of y would do as well. A normalised root-mean-square fit
--    as is usual in identification (L. Ljung, System Identification, 2nd ed. 1999).

local lw = require "latewood"

local math = lw.math -- the same bits everywhere

local measured = {}
local class = {}
class.__index = class
class.__name = "measured signal"
class.__metatable = false

local fields = { "time", "value", "every", "time_unit", "scale", "unit", "decimal", "separator",
  "from", "to", "shift" }
local MOST_ROWS = 1000000

measured.ROWS = "at the measured instants" -- name of the trace that has the run there

local function fail(format, ...)
  lw.fail(format:format(...))
end

local function known(what, t)
  for k in pairs(t) do
    local found = k == 1
    for _, name in ipairs(fields) do found = found or k == name end
    if not found then
      local near = lw.nearest(tostring(k), fields)
      fail("%s: no field \"%s\"%s", what, tostring(k), near and ("; nearest \"%s\""):format(near) or
        "")
    end
  end
end

local function one_of(what, field, value, choices)
  if value == nil then return end
  for _, choice in ipairs(choices) do
    if value == choice then return end
  end
  fail("%s: %s is \"%s\"; permitted \"%s\"", what, field, tostring(value),
    table.concat(choices, "\", \""))
end

-- Numbers of a list given in place of a column.
local function list_of(what, field, list, unit)
  if type(list) ~= "table" then
    fail("%s: %s is %s; a list of numbers is wanted", what, field, list == nil and "missing" or
      "a " .. type(list))
  end
  local out = {}
  for i, v in ipairs(list) do out[i] = lw.quantity(v, unit) end
  return out
end

local function columns_of(what, t)
  if t[1] == nil then
    for _, field in ipairs { "every", "time_unit", "decimal", "separator" } do
      if t[field] ~= nil then fail("%s: %s has no place beside lists", what, field) end
    end
    return list_of(what, "time", t.time, "s"), list_of(what, "value", t.value)
  end
  if type(t[1]) ~= "string" then
    fail("%s: its file is a %s; a name is wanted", what, type(t[1]))
  end
  if (t.time == nil) == (t.every == nil) then
    fail("%s: state one of time (a column) and every (time between rows)", what)
  end
  one_of(what, "decimal", t.decimal, { ".", "," })
  one_of(what, "separator", t.separator, { ",", ";", "tab" })
  local time, value = lw.columns { t[1], time = t.time, value = t.value, decimal = t.decimal,
    separator = t.separator }
  if not time then
    local every = lw.quantity(t.every, "s")
    if every <= 0 then fail("%s: every is %.6g s; above 0 is wanted", what, every) end
    time = {}
    for i = 1, #value do time[i] = (i - 1) * every end
  elseif t.time_unit ~= nil then
    local size = lw.quantity("1 " .. tostring(t.time_unit), "s")
    for i = 1, #time do time[i] = time[i] * size end
  end
  return time, value
end

local all = setmetatable({}, { __mode = "k" }) -- every measured signal there is

local function made(name, unit, time, value)
  local m = setmetatable({ name = name, unit = unit, time = time, value = value, n = #time }, class)
  all[m] = true
  return m
end

-- Rows within [from, to], shifted and scaled, whose times rise.
local function rows_of(what, t, time, value)
  local from = t.from ~= nil and lw.quantity(t.from, "s") or -math.huge
  local to = t.to ~= nil and lw.quantity(t.to, "s") or math.huge
  local shift = t.shift ~= nil and lw.quantity(t.shift, "s") or 0
  local scale = t.scale ~= nil and lw.quantity(t.scale) or 1
  local xs, ys, n = {}, {}, 0
  for i = 1, #time do
    if i > 1 and time[i] <= time[i - 1] then
      fail("%s: row %d: its time is %.9g s after %.9g s; times rise from row to row", what, i,
        time[i], time[i - 1])
    end
    if time[i] >= from and time[i] <= to then
      n = n + 1
      xs[n], ys[n] = time[i] + shift, value[i] * scale
    end
  end
  if n < 2 then fail("%s: %d rows; at least 2 are wanted", what, n) end
  if n > MOST_ROWS then fail("%s: %d rows; permitted up to %d", what, n, MOST_ROWS) end
  return xs, ys
end

local function new(t)
  if type(t) ~= "table" then fail("measured: a table is wanted") end
  local what = type(t[1]) == "string" and ("measured \"%s\""):format(t[1]) or "measured"
  known(what, t)
  if t.unit ~= nil and type(t.unit) ~= "string" then
    fail("%s: unit is a %s; text is wanted", what, type(t.unit))
  end
  local time, value = columns_of(what, t)
  if #time ~= #value then
    fail("%s: time has %d numbers and value %d; one length is wanted", what, #time, #value)
  end
  local xs, ys = rows_of(what, t, time, value)
  return made(type(t[1]) == "string" and t[1] or "measured", t.unit, xs, ys)
end

function measured.is(value)
  return all[value] == true
end

-- The same signal, later by a time.
function class:shifted(shift)
  local by, time = lw.quantity(shift, "s"), {}
  if by == 0 then return self end
  for i, t in ipairs(self.time) do time[i] = t + by end
  return made(self.name, self.unit, time, self.value)
end

-- The value at a time on a straight line between rows; nil before the first and after the last.
function class:at(time)
  local t, xs = lw.quantity(time, "s"), self.time
  if t < xs[1] or t > xs[self.n] then return nil end
  local lo, hi = 1, self.n
  while hi - lo > 1 do
    local middle = (lo + hi) // 2
    if xs[middle] <= t then lo = middle else hi = middle end
  end
  local share = (t - xs[lo]) / (xs[hi] - xs[lo])
  return self.value[lo] + share * (self.value[hi] - self.value[lo])
end

-- The rows within [from, till].
function measured.within(data, from, till)
  local time, value = {}, {}
  for i, t in ipairs(data.time) do
    if t >= from and t <= till then time[#time + 1], value[#value + 1] = t, data.value[i] end
  end
  return made(data.name, data.unit, time, value)
end

-- ---- beside a run

-- The record of a signal at the instants of the data; rows before time zero have none.
function measured.entry(data, signal)
  local at = {}
  for i, t in ipairs(data.time) do
    if t < 0 then
      fail("measured \"%s\": row %d lies at %.9g s, before the run begins; shift it, or state from",
        data.name, i, t)
    end
    at[i] = t
  end
  return { signal, at = at, limit = data.n }
end

-- Residuals: measured less run, at each row that the run reached.
function measured.residuals(data, values)
  local out = {}
  for i = 1, math.min(data.n, #values) do out[i] = data.value[i] - values[i] end
  return out
end

local function sum_squares(list, from)
  local sum = 0
  for _, v in ipairs(list) do sum = sum + (v - from) * (v - from) end
  return sum
end

-- kind: "fit", "residual rms" or "residual peak", over all rows; nil where the run ended before the
-- last one, and for the fit where the data are constant.
function measured.compare(kind, data, values)
  if #values < data.n then return nil end
  local residuals, mean, peak = measured.residuals(data, values), 0, 0
  for _, v in ipairs(data.value) do mean = mean + v end
  mean = mean / data.n
  for _, r in ipairs(residuals) do peak = math.max(peak, math.abs(r)) end
  if kind == "residual peak" then return peak end
  local square = sum_squares(residuals, 0)
  if kind == "residual rms" then return math.sqrt(square / data.n) end
  local own = sum_squares(data.value, mean)
  if own == 0 then return nil end
  return 1 - math.sqrt(square / own)
end

-- A record's values at the instants of the data, on straight lines between its rows.
function measured.sampled(data, record)
  local curve, out = made("run", nil, record.time, record.value), {}
  for i, t in ipairs(data.time) do
    out[i] = curve:at(math.min(math.max(t, curve.time[1]), curve.time[curve.n]))
  end
  return out
end

-- The shift in [-most, most] by which the data lie closest (least squares) to a record of the run,
-- straight lines between its rows, their ends beyond them: 201 places, then golden sections to a
-- 1e-6th of `most`.
function measured.align(data, record, most)
  local function distance(shift)
    local values, sum = measured.sampled(data:shifted(shift), record), 0
    for i = 1, data.n do sum = sum + (data.value[i] - values[i]) * (data.value[i] - values[i]) end
    return sum
  end
  local best, least = 0, math.huge
  for k = -100, 100 do
    local d = distance(most * k / 100)
    if d < least then best, least = most * k / 100, d end
  end
  local lo, hi, golden = best - most / 100, best + most / 100, 0.6180339887498949
  while hi - lo > 1e-6 * most do
    local a, b = hi - golden * (hi - lo), lo + golden * (hi - lo)
    if distance(a) <= distance(b) then hi = b else lo = a end
  end
  return (lo + hi) / 2
end

return setmetatable({}, {
  __index = measured,
  __newindex = function(_, name) fail("lw.measured.%s is assigned; it stays", tostring(name)) end,
  __call = function(_, t) return new(t) end,
  __metatable = false,
})
