-- The Lua suites as a study sees them: run by test_suites_in_sandbox.sh through the program. What
-- the study itself asks is beside the point.

require "test_module"
require "test_lua_flow"
require "test_own_law"
require "test_lua_run"

local lw = require "latewood"

return lw.study { function()
  return lw.rig("nothing"):source { "x", lw.source.constant(1) }
end, lasts = "1 ms" }
