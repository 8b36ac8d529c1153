-- CSV out (RFC 4180): CRLF ends, fields quoted where they must be.

local lw = require "latewood"

local csv = {}

local function field(v)
  if type(v) == "number" then
    if v ~= v then return "" end
    return math.type(v) == "integer" and ("%d"):format(v) or lw.number_text(v)
  end
  v = tostring(v)
  if v:find('[",\r\n]') then v = '"' .. v:gsub('"', '""') .. '"' end
  return v
end

-- A record { columns = {names}, n = rows, [name] = {values} } as text.
function csv.encode(record)
  local lines, row = {}, {}
  for c, name in ipairs(record.columns) do row[c] = field(name) end
  lines[1] = table.concat(row, ",")
  for i = 1, record.n do
    for c, name in ipairs(record.columns) do row[c] = field(record[name][i]) end
    lines[i + 1] = table.concat(row, ",")
  end
  return table.concat(lines, "\r\n") .. "\r\n"
end

return csv
