-- May the speed loop of the mount drive run on a timer that is often late?
--
-- The drive of a small telescope mount: a 20 kHz current loop with a stated latency inside a 1 kHz
-- speed loop. The speed loop's latency is once constant and once replayed from a recording: a
-- periodic timer thread on a Linux computer under load. That recording is real; it is a
-- computer's timer, not a microcontroller's, and stands in for one here. All values of the drive
-- are invented. Fifty steps of speed fall on ever new places of the recording.
local lw = require "latewood"

-- From nominal release to done, 20000 wake-ups; the head of the file says how it was recorded.
local recorded = lw.timing.replay { file = "data/timer_wakeups.txt", unit = "us" }

local function mount(p)
  local rig = lw.rig "mount axis"
  rig:plant  { "axis", lw.plant.two_mass_drive { resistance = "0.8 ohm", inductance = "2 mH",
                 torque_constant = 0.05, motor_inertia = 4e-4, load_inertia = 1.6e-3,
                 stiffness = 90, damping = 0.05 } }
  rig:source { "speed wanted", lw.source.pulses { at = "5 ms", high = 2.0,          -- rad/s
                 width = "200 ms", every = "400 ms" } }
  rig:value  { "current wanted" }
  rig:adc    { "current", of = "axis.current", every = "20 kHz", takes = "1.1 us",
               bits = 12, range = { -20, 20 } }
  rig:adc    { "speed", of = "axis.motor_speed", every = "1 kHz", bits = 16, range = { -64, 64 } }
  rig:dac    { "bridge", to = "axis.voltage", bits = 11, range = { -24, 24 } }
  rig:loop   { "current loop", wanted = "current wanted", measured = "current", output = "bridge",
               law = lw.law.pi { kp = 8, ki = 4000, limit = { -24, 24 }, anti_windup = "pause" },
               latency = "12 us" }
  rig:loop   { "speed loop", wanted = "speed wanted", measured = "speed",
               output = "current wanted",
               law = lw.law.pi { kp = p.kp, ki = 40, limit = { -6, 6 }, anti_windup = "clamp" },
               latency = p.timer == "recorded" and recorded or p.timer, arrival = "newest" }
  return rig
end

local study = lw.study { mount, lasts = "20 s",
  title  = "May the mount's speed loop run on a timer that is often late?",
  given  = { kp = 4.0, timer = "102 us" },
  called = { "constant 102 us", "recorded timer" },
  before = { timer = "102 us" },        -- the recording's median, at every sample
  after  = { timer = "recorded" },
}

study:requirement { "overshoot", of = "axis.load_speed", against = "speed wanted", from = "5 ms",
                    ["until"] = "200 ms", at_most = "15 %" }
study:requirement { "settling time", of = "axis.load_speed", against = "speed wanted",
                    from = "5 ms", ["until"] = "200 ms", band = "5 %", at_most = "150 ms" }
study:requirement { "largest speed", "maximum", of = "axis.load_speed", at_most = 2.3 }
study:metric      { "error rms", of = "axis.load_speed", against = "speed wanted" }
study:metric      { "bridge saturated", "saturation time", of = "bridge" }
study:metric      { "latency, mean", "latency mean", of = "speed loop" }
study:metric      { "latency, 99.9 %", "latency percentile", of = "speed loop", share = "99.9 %" }
study:metric      { "latency, largest", "latency maximum", of = "speed loop" }
study:figure      { "speed response", of = { "axis.load_speed", "axis.motor_speed" },
                    wanted = "speed wanted", ["until"] = "250 ms", unit = { "rad/s", "rad/s" },
                    note = "The recorded latency is that of a computer's timer thread under " ..
                      "load, not a microcontroller's. The drive's values are invented." }
study:figure      { "current and voltage", of = { "axis.current", "bridge" },
                    unit = { "A", "V" }, from = "4 ms", ["until"] = "24 ms" }
study:figure      { "latency of the speed loop", latency_of = "speed loop",
                    note = "Recorded: a computer's timer thread under load, not a " ..
                      "microcontroller's." }
return study
