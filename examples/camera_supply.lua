-- The supply of an observatory's camera: may its voltage loop run at half the rate?
--
-- A step-down converter from the 24 V of the mount to 5 V, its switch driven by a pulse-width
-- modulator; a PI law on the voltage sampled where the carrier has its peak. All values are
-- invented. Where the camera switches its cooler on, the load rises by 1 A.
--
-- Converters can burn and injure: try changes first with limited current and energy, under the local
-- electrical codes and the judgement of qualified people.

local lw = require "latewood"

local function supply(p)
  local rig = lw.rig "camera supply"
  rig:plant { "converter", lw.plant.buck { inductance = "47 uH", capacitance = "330 uF",
                                           resistance = 0.05, load_resistance = 10 } }
  rig:source { "mains", lw.source.constant(24) }
  rig:source { "cooler", lw.source.step { at = "8 ms", to = 1 } }
  rig:source { "wanted", lw.source.step { at = "1 ms", to = 5 } }
  rig:connect { "mains", to = "converter.supply" }
  rig:connect { "cooler", to = "converter.load_current" }
  rig:pwm { "switch", to = "converter.duty", carrier = "200 kHz", shape = "centre", counts = 425,
            reload = "valley", averaged = true }
  rig:adc { "voltage", of = "converter.voltage", every = p.every, takes = "0.8 us", bits = 12,
            range = { 0, 8 } }
  rig:loop { "voltage loop", law = lw.law.pi { kp = 0.01, ki = 30, limit = { 0, 0.9 },
                                               anti_windup = "clamp" },
             wanted = "wanted", measured = "voltage", output = "switch", latency = "60 %" }
  return rig
end

local study = lw.study { supply, lasts = "16 ms", title = "Camera supply: the loop at half the rate",
  given = {}, before = { every = "10 us" }, after = { every = "20 us" } }

study:requirement { "overshoot", of = "converter.voltage", against = "wanted", from = "1 ms",
                    to = "8 ms", at_most = "10 %" }
study:requirement { "settling time", of = "converter.voltage", against = "wanted", from = "1 ms",
                    to = "8 ms", band = "5 %", at_most = "6 ms" }
study:requirement { "dip", "minimum", of = "converter.voltage", from = "8 ms", at_least = 4.2 }
study:metric { "ripple", of = "converter.voltage", from = "15 ms" }

study:figure { "voltage and current", of = { "converter.voltage", "converter.current" },
               wanted = "wanted", band = { 4.75, 5.25 }, unit = { "V", "A" } }
return study
