-- JSON out (RFC 8259): keys in sorted or stated order, whole numbers without a point, never NaN or
-- Infinity (null stands for them), always valid UTF-8.

local lw = require "latewood"
local words = require "latewood.words"

local json = {}

local order = setmetatable({}, { __mode = "k" })

-- Mark a list, so that an empty one is written as [].
local list_mark = setmetatable({}, { __mode = "k" })
function json.list(t)
  list_mark[t] = true
  return t
end

-- State the order of an object's keys; others follow, sorted.
function json.ordered(keys, t)
  order[t] = keys
  return t
end

local DEEPEST = 60 -- blanks of indentation; a table may hold itself

local escapes = { ['"'] = '\\"', ["\\"] = "\\\\", ["\b"] = "\\b", ["\f"] = "\\f", ["\n"] = "\\n",
  ["\r"] = "\\r", ["\t"] = "\\t" }

local function text(s)
  return '"' .. words.valid(s):gsub('[%c"\\\127]', function(c)
    return escapes[c] or ("\\u%04x"):format(c:byte())
  end) .. '"'
end

local function number(x)
  if math.type(x) == "integer" then return ("%d"):format(x) end
  if x ~= x or x == math.huge or x == -math.huge then return "null" end
  return lw.number_text(x)
end

local function keys_of(t)
  local seen, keys, rest = {}, {}, {}
  for _, k in ipairs(order[t] or {}) do
    if t[k] ~= nil then
      keys[#keys + 1] = k
      seen[k] = true
    end
  end
  for k in pairs(t) do
    if not seen[k] then rest[#rest + 1] = k end
  end
  table.sort(rest, function(a, b) return tostring(a) < tostring(b) end)
  table.move(rest, 1, #rest, #keys + 1, keys)
  return keys
end

local write

-- What a parameter is that JSON has no word for: a timing describes itself, others name their kind.
local function in_words(v)
  local said = tostring(v)
  return said:find(": 0x%x+$") and type(v) or said
end

local function write_list(t, indent)
  local simple = true
  for i = 1, #t do simple = simple and type(t[i]) ~= "table" end
  local parts = {}
  for i = 1, #t do parts[i] = write(t[i], indent .. "  ") end
  if simple then return "[" .. table.concat(parts, ", ") .. "]" end
  return "[\n" .. indent .. "  " .. table.concat(parts, ",\n" .. indent .. "  ") .. "\n" ..
    indent .. "]"
end

local function write_object(t, indent)
  local parts = {}
  for i, k in ipairs(keys_of(t)) do
    parts[i] = indent .. "  " .. text(tostring(k)) .. ": " .. write(t[k], indent .. "  ")
  end
  if #parts == 0 then return "{}" end
  return "{\n" .. table.concat(parts, ",\n") .. "\n" .. indent .. "}"
end

function write(v, indent)
  local kind = type(v)
  if kind == "string" then return text(v) end
  if kind == "number" then return number(v) end
  if kind == "boolean" then return tostring(v) end
  if kind == "nil" then return "null" end
  if kind ~= "table" or #indent > DEEPEST then return text(in_words(v)) end
  if list_mark[v] or #v > 0 then return write_list(v, indent) end
  return write_object(v, indent)
end

-- The value as JSON text, ending in a line feed.
function json.encode(value)
  return write(value, "") .. "\n"
end

return json
