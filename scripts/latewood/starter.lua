-- What `latewood new DIR` writes: a study to start from. Everything here is 0BSD.

return {
  { file = "study.lua", text = [=[
-- SPDX-License-Identifier: 0BSD
-- A first study: one current loop of a small telescope mount. All values are invented: put yours.
-- Run it:        latewood run study.lua
-- With a change: latewood run study.lua latency="45 us"
local lw = require "latewood"

-- Called once for each variant. It describes the loop; nothing runs here.
local function loop(p)
  local rig = lw.rig "current loop"
  rig:plant  { "motor", lw.plant.winding { resistance = "0.8 ohm", inductance = "2 mH" } }
  rig:source { "wanted", lw.source.step { at = "1 ms", to = 2.0 } }            -- amperes
  rig:adc    { "current", of = "motor.current", every = "20 kHz", takes = "1.1 us",
               bits = 12, range = { -20, 20 } }
  rig:dac    { "bridge", to = "motor.voltage", bits = 11, range = { -24, 24 } }
  rig:loop   { "control", wanted = "wanted", measured = "current", output = "bridge",
               law = lw.law.pi { kp = p.kp, ki = 4000, limit = { -24, 24 }, anti_windup = "pause" },
               latency = p.latency }                                           -- sample to output
  return rig
end

local study = lw.study { loop, lasts = "10 ms",
  title  = "Does the current loop still meet its limits with the longer latency?",
  given  = { kp = 8, latency = "12 us" },
  called = { "12 us", "45 us" },
  before = { latency = "12 us" },
  after  = { latency = "45 us" },
}

study:requirement { "overshoot", of = "motor.current", against = "wanted", from = "1 ms",
                    at_most = "10 %" }
study:requirement { "settling time", of = "motor.current", against = "wanted", from = "1 ms",
                    band = "2 %", at_most = "2 ms" }
study:metric      { "error rms", of = "motor.current", against = "wanted" }
study:figure      { "current", of = "motor.current", wanted = "wanted", band = { 1.96, 2.04 },
                    unit = "A", to = "4 ms" }
return study
]=] },
  { file = "README.md", text = [=[
# A study of control timing

`study.lua` describes one loop, what is required of it, and what changes. All values in it are
invented: put yours in.

    latewood describe study.lua          # the loop in words; runs nothing
    latewood run study.lua               # verdict, table, figures in study-results/
    latewood run study.lua kp=6          # another value for a parameter under `given`

Exit code 0: requirements met, 1: not met, 2: undecided; 64 and above: no verdict.

Results describe the model, not the machine. Motor drives and moving axes can injure and burn: try
changes first with limited current and energy, guards and an emergency stop, under the local codes
and the judgement of qualified people.

These files are 0BSD: do with them what you like.
]=] },
  { file = ".luarc.json", text = [=[
{
  "runtime.version": "Lua 5.4",
  "diagnostics.globals": []
}
]=] },
}
