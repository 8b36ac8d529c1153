-- The phase at which something hurts most: a stall, an offset, a second clock.
--
-- lw.worst_phase { of = function(at), over = , phases = , from = 0 }
--   of      builds a rig with something at instant `at` [s], runs it, returns a number
--   over    the stretch of time that is searched: a hyperperiod, where the schedule repeats
--   phases  instants tried, evenly over it, the first at `from`
-- Returns { value, at, values }: the largest number, its instant, and all of them in order. Among
-- equals the first. What lies between two instants is not looked at.

local lw = require "latewood"

local function fail(format, ...)
  lw.fail("worst_phase: " .. format:format(...))
end

local function time(t, field, default)
  local value = t[field]
  if value == nil then value = default end
  if value == nil then fail("%s is missing; a time is wanted", field) end
  local number, message = lw.quantity(value, "s")
  if not number then fail("%s: %s", field, tostring(message)) end
  return number
end

local known = { of = true, over = true, phases = true, from = true }

return function(t)
  if type(t) ~= "table" then fail("a table is wanted") end
  for k in pairs(t) do
    if not known[k] then fail("no field \"%s\"", tostring(k)) end
  end
  if type(t.of) ~= "function" then fail("of is missing; a function of the instant is wanted") end
  if math.type(t.phases) ~= "integer" or t.phases < 1 or t.phases > 1000000 then
    fail("phases is %s; a whole number from 1 to 1000000 is wanted", tostring(t.phases))
  end
  local from, over = time(t, "from", 0), time(t, "over")
  local worst = { values = {} }
  for k = 0, t.phases - 1 do
    local at = from + over * k / t.phases
    local value = t.of(at)
    if type(value) ~= "number" then
      fail("of returned %s at %g s; a number is wanted", tostring(value), at)
    end
    worst.values[k + 1] = value
    if worst.value == nil or value > worst.value then worst.value, worst.at = value, at end
  end
  return worst
end
