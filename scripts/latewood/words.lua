-- Numbers and times in words, and text laid out in columns.

local words = {}

local steps = { { 1, "s" }, { 1e-3, "ms" }, { 1e-6, "us" }, { 1e-9, "ns" }, { 1e-12, "ps" } }

-- The unit in which a time of this size reads best: its size in seconds, and its name.
function words.time_unit(seconds)
  local size = math.abs(seconds)
  for _, s in ipairs(steps) do
    if size >= s[1] * 0.9999 then return s[1], s[2] end
  end
  return 1, "s"
end

function words.time(seconds)
  if seconds ~= seconds then return "never" end
  local size, name = words.time_unit(seconds)
  return ("%.4g %s"):format(seconds / size, name)
end

local shares = { overshoot = true }
local times = { ["settling time"] = true, ["rise time"] = true, ["peak time"] = true,
  ["saturation time"] = true, ["latency percentile"] = true, ["latency mean"] = true,
  ["latency maximum"] = true }

-- A metric's value as a reader expects it: shares in percent, times with a unit.
function words.metric(kind, value)
  if value == nil then return "-" end
  if shares[kind] then
    return value ~= value and "undefined" or ("%.3g %%"):format(value * 100)
  end
  if times[kind] then return words.time(value) end
  return value ~= value and "undefined" or ("%.5g"):format(value)
end

-- Length in characters, not bytes.
function words.width(s)
  return utf8.len(s) or #s
end

function words.pad(s, width, right)
  local blank = (" "):rep(width - words.width(s))
  return right and blank .. s or s .. blank
end

-- Cut to at most `width` characters.
function words.cut(s, width)
  if words.width(s) <= width then return s end
  return s:sub(1, utf8.offset(s, width) - 1) .. "~"
end

-- Break text into lines of at most `width` characters.
function words.wrap(s, width)
  local lines, line = {}, ""
  for word in s:gmatch("%S+") do
    if line ~= "" and words.width(line) + 1 + words.width(word) > width then
      lines[#lines + 1] = line
      line = word
    else
      line = line == "" and word or line .. " " .. word
    end
  end
  lines[#lines + 1] = line
  return lines
end

return words
