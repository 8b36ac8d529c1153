-- Points of a sweep: which values the parameters take together.
--
-- lw.sweep.grid { name = { values }, ... }     every combination; the last name (in order of the
--   alphabet) moves fastest. A plain table as `sweep` of a study is a grid.
-- lw.sweep.zip { name = { values }, ... }      first with first, second with second
-- lw.sweep.list { { name = value, ... }, ... } as listed
-- lw.sweep.low_discrepancy { n = , name = { lo, hi }, ... }  Halton's sequence (J. H. Halton,
--   Numer. Math. 2 (1960) 84-90), one prime a name, beginning after zero
-- lw.sweep.latin_hypercube { n = , seed = , name = { lo, hi }, ... }  one value in each of n equal
--   parts of every range, parts matched at random (M. D. McKay, R. J. Beckman, W. J. Conover,
--   Technometrics 21 (1979) 239-245)

local lw = require "latewood"

local function fail(format, ...)
  lw.fail(format:format(...))
end

local made = setmetatable({}, { __mode = "k" })

local function new(points, text)
  if #points == 0 then fail("sweep: there is no point") end
  if #points > 100000 then fail("sweep: %d points; at most 100000 are permitted", #points) end
  local sweep = { points = points, text = text }
  made[sweep] = true
  return sweep
end

-- Names in order, options taken away; each entry checked to be a list.
local function names_of(what, t, options)
  if type(t) ~= "table" then fail("sweep %s: a table is wanted", what) end
  local names = {}
  for k, v in pairs(t) do
    if not options[k] then
      if type(k) ~= "string" then fail("sweep %s: an entry has no name", what) end
      if type(v) ~= "table" or #v == 0 then
        fail("sweep %s: %s is no list of values", what, k)
      end
      names[#names + 1] = k
    end
  end
  table.sort(names)
  if #names == 0 then fail("sweep %s: no parameter is named", what) end
  return names
end

local function quantities(what, name, list)
  local lo, hi = list[1], list[2]
  if type(lo) == "string" then lo = lw.quantity(lo) end
  if type(hi) == "string" then hi = lw.quantity(hi) end
  if #list ~= 2 or type(lo) ~= "number" or type(hi) ~= "number" or not (lo < hi) then
    fail("sweep %s: %s: { lo, hi } with lo below hi is wanted", what, name)
  end
  return lo, hi
end

local function count_of(what, n)
  if math.type(n) ~= "integer" or n < 1 or n > 100000 then
    fail("sweep %s: n is %s; a whole number from 1 to 100000 is wanted", what, tostring(n))
  end
  return n
end

local module = {}

function module.grid(t)
  local names = names_of("grid", t, {})
  local n, points = 1, {}
  for _, name in ipairs(names) do n = n * #t[name] end
  if n > 100000 then fail("sweep grid: %d points; at most 100000 are permitted", n) end
  for k = 0, n - 1 do
    local point, rest = {}, k
    for i = #names, 1, -1 do
      local values = t[names[i]]
      point[names[i]] = values[rest % #values + 1]
      rest = rest // #values
    end
    points[k + 1] = point
  end
  return new(points, "grid")
end

function module.zip(t)
  local names, points = names_of("zip", t, {}), {}
  for _, name in ipairs(names) do
    if #t[name] ~= #t[names[1]] then
      fail("sweep zip: %s has %d values, %s %d; as many are wanted", names[1], #t[names[1]], name,
        #t[name])
    end
  end
  for k = 1, #t[names[1]] do
    points[k] = {}
    for _, name in ipairs(names) do points[k][name] = t[name][k] end
  end
  return new(points, "zip")
end

function module.list(t)
  if type(t) ~= "table" then fail("sweep list: a list of points is wanted") end
  local points = {}
  for k, point in ipairs(t) do
    if type(point) ~= "table" then fail("sweep list: entry %d is no table of values", k) end
    points[k] = point
  end
  return new(points, "list")
end

local PRIMES = { 2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37, 41, 43, 47, 53 }

-- Digits of k in the base, mirrored at the point.
local function mirrored(k, base)
  local value, place = 0.0, 1.0 / base
  while k > 0 do
    value = value + (k % base) * place
    k, place = k // base, place / base
  end
  return value
end

function module.low_discrepancy(t)
  local what = "low_discrepancy"
  local names, n, points = names_of(what, t, { n = true }), count_of(what, t.n), {}
  if #names > #PRIMES then fail("sweep %s: at most %d parameters", what, #PRIMES) end
  for k = 1, n do points[k] = {} end
  for i, name in ipairs(names) do
    local lo, hi = quantities(what, name, t[name])
    for k = 1, n do points[k][name] = lo + (hi - lo) * mirrored(k, PRIMES[i]) end
  end
  return new(points, ("low discrepancy, %d points"):format(n))
end

function module.latin_hypercube(t)
  local what = "latin_hypercube"
  local names, n = names_of(what, t, { n = true, seed = true }), count_of(what, t.n)
  local seed, points = t.seed or 1, {}
  for k = 1, n do points[k] = {} end
  for _, name in ipairs(names) do
    local lo, hi = quantities(what, name, t[name])
    local parts = {}
    for k = 1, n do parts[k] = k - 1 end
    for k = n, 2, -1 do -- shuffle (R. A. Fisher, F. Yates; R. Durstenfeld 1964)
      local j = math.floor(lw.draw(seed, 0, "sweep.order." .. name, k) * k) + 1
      parts[k], parts[j] = parts[j], parts[k]
    end
    for k = 1, n do
      local u = (parts[k] + lw.draw(seed, 0, "sweep.place." .. name, k)) / n
      points[k][name] = lo + (hi - lo) * u
    end
  end
  return new(points, ("Latin hypercube, %d points"):format(n))
end

local own = {}

-- The points of what a study has as `sweep`; nil where it is neither a sweep nor a table.
function own.points(value)
  if made[value] then return value.points end
  if type(value) == "table" then return module.grid(value).points end
  return nil
end

return setmetatable(module, { __index = own, __metatable = false })
