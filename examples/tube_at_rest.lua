-- The telescope's tube, out of balance and with dry friction: does it come to rest where it should?
--
-- A PD law holds the tube's angle against its weight; the motor's torque is limited. Dry friction
-- holds the tube a little off. All values are invented. Moving axes can injure: guards and an
-- emergency stop first, and the judgement of qualified people.

local lw = require "latewood"

local function tube(p)
  local rig = lw.rig "tube"
  rig:plant { "tube", lw.plant.pendulum { inertia = 0.9, weight_torque = 1.2, viscous = 0.05,
                                          dry = p.dry, breakaway = 1.3 * p.dry } }
  rig:source { "wanted", lw.source.ramp { at = "0.5 s", slope = 0.4, to = 0.6 } }
  rig:adc { "angle", of = "tube.angle", every = "2 ms", bits = 20, range = { -4, 4 } }
  rig:dac { "motor", to = "tube.torque", range = { -6, 6 } }
  rig:loop { "angle loop", law = lw.law.pid { kp = 40, ki = 25, kd = 9, limit = { -6, 6 },
                                              anti_windup = "clamp" },
             wanted = "wanted", measured = "angle", output = "motor", latency = p.latency }
  return rig
end

local study = lw.study { tube, lasts = "6 s", title = "Unbalanced tube: one period more of latency",
  given = { dry = 0.15 }, before = { latency = "0.4 ms" }, after = { latency = "2.4 ms" } }

study:requirement { "overshoot", of = "tube.angle", against = "wanted", from = "0.5 s",
                    at_most = "10 %" }
study:requirement { "off at the end", "steady-state error", of = "tube.angle", against = "wanted",
                    last = "0.5 s", at_most = 0.01 }
study:metric { "reversals of the motor", "reversals", of = "motor", step = 0.05, from = "4 s" }

study:figure { "angle", of = { "tube.angle", "motor" }, wanted = "wanted", unit = { "rad", "N m" } }
return study
