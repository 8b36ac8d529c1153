-- Every Lua example of the README runs, in a stock Lua, as it is printed.

local passed, failed = 0, 0

local function check(name, ok, why)
  if ok then passed = passed + 1 else
    failed = failed + 1
    print("FAILED " .. name .. ": " .. tostring(why))
  end
end

local file = assert(io.open("README.md"))
local text = file:read("a")
file:close()

local silent = setmetatable({ print = function() end }, { __index = _G })
local n = 0
for block in text:gmatch("```lua\n(.-)```") do
  n = n + 1
  local chunk, why = load(block, "@README example " .. n, "t", silent)
  local ok, result = pcall(chunk or function() error(why) end)
  check("example_" .. n .. "_runs", ok, result)
  if ok and type(result) == "table" then -- a study: run it too
    local done, outcome = pcall(result.execute, result, {}, {})
    check("example_" .. n .. "_gives_a_verdict", done and outcome and outcome.verdict, outcome)
  end
end
check("there_are_examples", n >= 5, n)

print(("%d passed, %d failed"):format(passed, failed))
os.exit(failed == 0)
