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
  if seconds ~= seconds then return "undefined" end
  local size, name = words.time_unit(seconds)
  return ("%.4g %s"):format(seconds / size, name)
end

-- Units of metrics; a kind that is not named has that of its signal, which nobody stated.
words.units = { overshoot = "1", undershoot = "1", reversals = "1", chatter = "1/s",
  ["time outside mask"] = "s", ["first outside mask"] = "s", ["output age"] = "s",
  ["output age mean"] = "s", ["output age percentile"] = "s", lost = "1",
  missed = "1", ["settling time"] = "s",
  ["rise time"] = "s", ["peak time"] = "s", ["saturation time"] = "s",
  ["latency percentile"] = "s", ["latency mean"] = "s", ["latency maximum"] = "s" }

-- Times and counts of a task's jobs.
for _, time in ipairs { "release lateness", "start delay", "response", "execution",
                        "read to write", "data age" } do
  for _, statistic in ipairs { "mean", "maximum", "percentile" } do
    words.units[time .. " " .. statistic] = "s"
  end
end
for _, statistic in ipairs { "", " mean", " percentile" } do
  words.units["gap between outputs" .. statistic] = "s"
end
for _, count in ipairs { "jobs", "skipped jobs", "aborted jobs", "misses in a row",
                         "misses within a window" } do
  words.units[count] = "1"
end

words.units.fit = "1"

-- The kind of a metric of a study's own, which tells its unit.
function words.own_kind(unit)
  return unit == "" and "own metric" or "own metric in " .. unit
end

local function own_unit(kind)
  return type(kind) == "string" and kind:match("^own metric in (.+)$") or nil
end
setmetatable(words.units, { __index = function(_, kind)
  local unit = own_unit(kind)
  return unit == "%" and "1" or unit
end })

local never = { ["settling time"] = "never", ["rise time"] = "never" }

-- A metric's value as a reader expects it: shares in percent, times with a unit.
function words.metric(kind, value)
  if value ~= value then return never[kind] or "undefined" end
  if kind == "overshoot" or kind == "undershoot" then return ("%.3g %%"):format(value * 100) end
  if kind == "fit" or own_unit(kind) == "%" then return ("%.4g %%"):format(value * 100) end
  if words.units[kind] == "s" then return words.time(value) end
  local unit = own_unit(kind)
  return ("%.5g"):format(value) .. (unit and " " .. unit or "")
end

-- Valid UTF-8: bytes that are none become U+FFFD.
function words.valid(s)
  local parts, at = {}, 1
  while true do
    local n, bad = utf8.len(s, at)
    if n then break end
    parts[#parts + 1] = s:sub(at, bad - 1) .. "\u{FFFD}"
    at = bad + 1
  end
  return #parts == 0 and s or table.concat(parts) .. s:sub(at)
end

-- One line that a terminal or a page shows as it stands: no control characters.
function words.plain(s)
  return (words.valid(tostring(s)):gsub("%c+", " "):gsub("\xC2[\x80-\x9F]", " "))
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

-- Break text into lines of at most `width` characters; a longer word is broken too.
function words.wrap(s, width)
  local lines, line = {}, ""
  local function add(word)
    if line ~= "" and words.width(line) + 1 + words.width(word) > width then
      lines[#lines + 1] = line
      line = word
    else
      line = line == "" and word or line .. " " .. word
    end
  end
  for word in s:gmatch("%S+") do
    while words.width(word) > width do
      local cut = utf8.offset(word, width + 1)
      add(word:sub(1, cut - 1))
      word = word:sub(cut)
    end
    add(word)
  end
  lines[#lines + 1] = line
  return lines
end

-- A path as it is typed into a shell.
function words.shell(s)
  if s:find("^[%w%._/+,@%%:=-]+$") and s:sub(1, 1) ~= "-" then return s end
  return "'" .. s:gsub("'", "'\\''") .. "'"
end

return words
