-- A strict JSON reader (RFC 8259) for the tests: the program's JSON must be readable by anyone.
--
-- read_json(text): the value; raises with the place of the first fault. Objects become tables with
-- their keys in order under read_json.order[t]; null is read_json.null. Refused too: invalid UTF-8,
-- a key that stands twice, anything behind the value.

local reader = { null = setmetatable({}, { __name = "null" }),
  order = setmetatable({}, { __mode = "k" }) }

local function fault(s, what)
  error(("byte %d: %s, found %q"):format(s.at, what, s.text:sub(s.at, s.at + 9)), 0)
end

local function blanks(s)
  s.at = s.text:find("[^ \t\r\n]", s.at) or #s.text + 1
end

local function take(s, literal)
  if s.text:sub(s.at, s.at + #literal - 1) ~= literal then fault(s, literal .. " is wanted") end
  s.at = s.at + #literal
end

local plain = { b = "\b", f = "\f", n = "\n", r = "\r", t = "\t", ['"'] = '"', ["\\"] = "\\",
  ["/"] = "/" }

local function unit(s)
  local hex = s.text:match("^\\u(%x%x%x%x)", s.at)
  if not hex then fault(s, "\\u and four digits are wanted") end
  s.at = s.at + 6
  return tonumber(hex, 16)
end

local function escaped(s)
  local letter = s.text:sub(s.at + 1, s.at + 1)
  if plain[letter] then
    s.at = s.at + 2
    return plain[letter]
  end
  local code = unit(s)
  if code >= 0xD800 and code < 0xDC00 then
    local low = unit(s)
    if low < 0xDC00 or low > 0xDFFF then fault(s, "the second half of a pair is wanted") end
    code = 0x10000 + (code - 0xD800) * 0x400 + (low - 0xDC00)
  elseif code >= 0xDC00 and code <= 0xDFFF then
    fault(s, "half a pair")
  end
  return utf8.char(code)
end

local function string_at(s)
  local parts = {}
  take(s, '"')
  while true do
    local run = s.text:match('^[^"\\%c]+', s.at) or s.text:match("^\127+", s.at) or ""
    parts[#parts + 1] = run
    s.at = s.at + #run
    local next_one = s.text:sub(s.at, s.at)
    if next_one == '"' then break end
    if next_one == "\\" then
      parts[#parts + 1] = escaped(s)
    elseif run == "" then
      fault(s, "the end of a string is wanted")
    end
  end
  s.at = s.at + 1
  return table.concat(parts)
end

local function number_at(s)
  local text = s.text:match("^-?%d+%.?%d*[eE]?[+-]?%d*", s.at)
  if not text or text:find("^-?0%d") or text:find("%.$") or text:find("%.[eE]") or
    text:find("[eE+-]$") then
    fault(s, "a number is wanted")
  end
  s.at = s.at + #text
  return tonumber(text)
end

local value_at

local function list_at(s)
  local list = {}
  take(s, "[")
  blanks(s)
  if s.text:sub(s.at, s.at) ~= "]" then
    repeat
      list[#list + 1] = value_at(s)
      blanks(s)
      local more = s.text:sub(s.at, s.at) == ","
      if more then s.at = s.at + 1 end
    until not more
  end
  take(s, "]")
  return list
end

local function object_at(s)
  local object, keys = {}, {}
  take(s, "{")
  blanks(s)
  if s.text:sub(s.at, s.at) ~= "}" then
    repeat
      blanks(s)
      local key = string_at(s)
      if object[key] ~= nil then fault(s, "key " .. key .. " stands there twice") end
      blanks(s)
      take(s, ":")
      object[key] = value_at(s)
      keys[#keys + 1] = key
      blanks(s)
      local more = s.text:sub(s.at, s.at) == ","
      if more then s.at = s.at + 1 end
    until not more
  end
  take(s, "}")
  reader.order[object] = keys
  return object
end

local literals = { t = { "true", true }, f = { "false", false }, n = { "null", reader.null } }

function value_at(s)
  blanks(s)
  local first = s.text:sub(s.at, s.at)
  if first == "{" then return object_at(s) end
  if first == "[" then return list_at(s) end
  if first == '"' then return string_at(s) end
  if literals[first] then
    take(s, literals[first][1])
    return literals[first][2]
  end
  return number_at(s)
end

local function read(_, text)
  local ok, bad = utf8.len(text)
  if not ok then error(("byte %d: no UTF-8"):format(bad), 0) end
  local s = { text = text, at = 1 }
  local value = value_at(s)
  blanks(s)
  if s.at <= #text then fault(s, "the end is wanted") end
  return value
end

return setmetatable(reader, { __call = read })
