-- Spreads: what a parameter may be, drawn once a run. In `given` of a study a spread stands where a
-- value would; the rig then gets the value drawn, and `nominal` the median.
--
-- lw.spread.uniform(lo, hi)
-- lw.spread.triangular(lo, mode, hi)
-- lw.spread.normal(middle, deviation [, cut])      deviation a number, or "5 %" of the middle; cut
--   off at `cut` deviations (4 unless stated)
-- lw.spread.log_normal(median, factor [, cut])     factor above 1: exp of the deviation of the log
-- lw.spread.one_of(value, value, ...)              each as likely
--
-- A spread is a quantile function: its draw is quantile(u), u addressed by seed, run and the
-- parameter's name (stream "spread.NAME"), so that no other draw moves.

local lw = require "latewood"

local spread = {}
spread.__index = spread
spread.__name = "spread"
spread.__metatable = false
spread.__tostring = function(s) return s.text end

local made = setmetatable({}, { __mode = "k" })

local function fail(format, ...)
  lw.fail(format:format(...))
end

local function new(text, median, lo, hi, quantile)
  local s = setmetatable({ text = text, median = median, lo = lo, hi = hi, quantile = quantile },
    spread)
  made[s] = true
  return s
end

local function number(what, field, value)
  local n = type(value) == "string" and lw.quantity(value) or value
  if type(n) ~= "number" or n ~= n or math.abs(n) == math.huge then
    fail("spread %s: %s is %s; a finite number is wanted", what, field, tostring(value))
  end
  return n
end

local text = lw.number_text

local module = {}

function module.uniform(lo, hi)
  lo, hi = number("uniform", "lo", lo), number("uniform", "hi", hi)
  if not (lo < hi) then
    fail("spread uniform: lo is %s, hi %s; lo below hi is wanted", text(lo), text(hi))
  end
  return new(("uniform from %s to %s"):format(text(lo), text(hi)), lo + 0.5 * (hi - lo), lo, hi,
    function(u) return lo + u * (hi - lo) end)
end

function module.triangular(lo, mode, hi)
  lo, mode, hi = number("triangular", "lo", lo), number("triangular", "mode", mode),
    number("triangular", "hi", hi)
  if not (lo <= mode and mode <= hi and lo < hi) then
    fail("spread triangular: %s, %s, %s; rising numbers are wanted", text(lo), text(mode), text(hi))
  end
  local share = (mode - lo) / (hi - lo)
  local function quantile(u)
    if u < share then return lo + math.sqrt(u * (hi - lo) * (mode - lo)) end
    return hi - math.sqrt((1 - u) * (hi - lo) * (hi - mode))
  end
  return new(("triangular from %s over %s to %s"):format(text(lo), text(mode), text(hi)),
    quantile(0.5), lo, hi, quantile)
end

-- The standard normal quantile, cut off at `cut` deviations on both sides.
local function cut_normal(cut)
  local below = lw.normal_cdf(-cut)
  local share = 1 - 2 * below
  return function(u) return lw.normal_quantile(below + u * share) end
end

local function cut_of(what, cut)
  cut = cut == nil and 4 or number(what, "cut", cut)
  if not (cut > 0 and cut <= 8) then
    fail("spread %s: cut is %s deviations; above 0, at most 8 is permitted", what, text(cut))
  end
  return cut
end

function module.normal(middle, deviation, cut)
  middle = number("normal", "middle", middle)
  local share = type(deviation) == "string" and deviation:match("^%s*([%d.eE+-]+)%s*%%%s*$")
  local sigma = share and math.abs(middle) * number("normal", "deviation", tonumber(share)) / 100
    or number("normal", "deviation", deviation)
  if not (sigma > 0) then
    fail("spread normal: deviation is %s; above 0 is wanted", text(sigma))
  end
  cut = cut_of("normal", cut)
  local z = cut_normal(cut)
  return new(("normal, %s with deviation %s%s, cut off at %s deviations"):format(text(middle),
    text(sigma), share and (" (%s %%)"):format(share) or "", text(cut)), middle,
    middle - cut * sigma, middle + cut * sigma, function(u) return middle + sigma * z(u) end)
end

function module.log_normal(median, factor, cut)
  median, factor = number("log_normal", "median", median), number("log_normal", "factor", factor)
  if not (median > 0 and factor > 1) then
    fail("spread log_normal: median %s, factor %s; above 0 and above 1 are wanted", text(median),
      text(factor))
  end
  cut = cut_of("log_normal", cut)
  local z, sigma = cut_normal(cut), lw.math.log(factor)
  return new(("log-normal, median %s, factor %s, cut off at %s deviations"):format(text(median),
    text(factor), text(cut)), median, median * lw.math.exp(-cut * sigma),
    median * lw.math.exp(cut * sigma), function(u) return median * lw.math.exp(sigma * z(u)) end)
end

function module.one_of(...)
  local values, names = { ... }, {}
  if #values == 0 then fail("spread one_of: no value is given") end
  for i, v in ipairs(values) do
    values[i] = number("one_of", "value " .. i, v)
    names[i] = text(values[i])
  end
  local sorted = table.move(values, 1, #values, 1, {})
  table.sort(sorted)
  return new("one of " .. table.concat(names, ", "), sorted[(#sorted + 1) // 2], sorted[1],
    sorted[#sorted], function(u) return values[math.min(math.floor(u * #values) + 1, #values)] end)
end

-- For the modules that run studies.
local own = {}

function own.is(value)
  return made[value] == true
end

-- Whether any of the parameters is a spread.
function own.varies(p)
  for _, v in pairs(p) do
    if made[v] then return true end
  end
  return false
end

-- Parameters with spreads at their median, and with the values drawn for one run.
function own.nominal(p)
  local out = {}
  for k, v in pairs(p) do out[k] = made[v] and v.median or v end
  return out
end

function own.drawn(p, seed, run)
  local out = {}
  for k, v in pairs(p) do
    out[k] = made[v] and v.quantile(lw.draw(seed, run, "spread." .. k, 0)) or v
  end
  return out
end

return setmetatable(module, { __index = own, __metatable = false })
