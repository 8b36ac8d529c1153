-- A study that touches as much as it can in a short run, so that its bytes notice any difference
-- in arithmetic between builds and machines. All values are invented.
local lw = require "latewood"

local timings = {
  uniform = lw.timing.uniform("4 us", "61 us"),
  triangular = lw.timing.triangular("4 us", "9 us", "80 us"),
  normal = lw.timing.normal { mean = "30 us", deviation = "6 us" },
  log_normal = lw.timing.log_normal { median = "12 us", sigma = 0.4, shift = "4 us",
    hi = "200 us" },
  exponential = lw.timing.exponential { shift = "5 us", mean = "11 us", hi = "150 us" },
  gumbel = lw.timing.gumbel { location = "25 us", scale = "3 us", lo = "5 us", hi = "90 us" },
  modes = lw.timing.modes { quiet = lw.timing.uniform("4 us", "6 us"),
    burst = lw.timing.uniform("40 us", "70 us"), enter = 0.05, leave = 0.3 },
  stall = lw.timing.stall { usual = lw.timing.constant("6 us"), stall = lw.timing.constant("70 us"),
    every = 17, phase = "random" },
  mixed = lw.timing.maximum(lw.timing.uniform("4 us", "20 us"),
    lw.timing.discrete { values = { 5e-6, 8e-6, 3e-5 }, weights = { 5, 3, 1 } }) * 1.5 + "1 us",
  histogram = lw.timing.histogram { edges = { 4e-6, 8e-6, 2e-5, 9e-5 }, weights = { 5, 2, 1 } },
}

local laws = {
  uniform = lw.law.pi { kp = 4, ki = 900, limit = { -24, 24 }, anti_windup = "pause" },
  triangular = lw.law.pi { kp = 4, ki = 900, limit = { -24, 24 }, anti_windup = "clamp" },
  normal = lw.law.pi { kp = 4, ki = 900, limit = { -24, 24 }, anti_windup = "back-calculation",
    kb = 300 },
  log_normal = lw.law.pid { kp = 4, ki = 700, kd = 2e-4, filter = "200 us",
    integration = "trapezoidal", derivative_of = "measured", period = "measured" },
  exponential = lw.law.pd { kp = 4, kd = 1e-4, filter = "100 us" },
  gumbel = lw.law.lead { gain = 3, zero = 200, pole = 3000 },
  modes = lw.law.biquad { b = { 2, -1.2, 0.3 }, a = { 1, -0.4, 0.1 } },
  stall = lw.law.z_transfer { b = { 3, -1 }, a = { 1, -0.5, 0.1, 0.02 } },
  mixed = lw.law.p { kp = 5 },
  histogram = lw.law.own { state = { s = 0, n = lw.int(0) },
    step = function(wanted, measured, dt, s, n)
      local e = wanted - measured
      local soft = 6 * lw.math.tanh(e) + 0.1 * math.sin(3 * s) + e ^ 2 * 0.01
      return soft + s, s + 300 * dt * e, n + 1
    end },
}

local function build(p)
  local rig = lw.rig "pieces"
  rig:plant  { "axis", lw.plant.two_mass_drive { resistance = 0.8, inductance = "2 mH",
                 torque_constant = 0.05, motor_inertia = 4e-4, load_inertia = 1.6e-3,
                 stiffness = 90, damping = 0.05 } }
  rig:plant  { "stiff", lw.plant.transfer { num = { 1e6 }, den = { 1, 1000001, 1e6 } } }
  rig:source { "wanted", lw.source.pulses { low = -1, high = 1.5, every = "8 ms", width = "3 ms" } }
  rig:source { "gust", lw.source.ramp { at = "1 ms", slope = 3, to = 0.02 } }
  rig:source { "wave", lw.source.sine { amplitude = 0.3, frequency = "333 Hz", phase = 1,
                 at = "300 us" } }
  rig:source { "sweep", lw.source.chirp { amplitude = 0.5, from = "10 Hz", to = "2 kHz",
                 over = "10 ms", every = "20 us" } }
  rig:source { "hiss", lw.source.noise { deviation = 0.05, every = "30 us" } }
  rig:connect { "gust", to = "axis.load_torque" }
  rig:connect { "wave", to = "stiff.in" }
  rig:adc    { "current", of = "axis.current", every = "30 kHz", takes = "3 us", bits = 12,
               range = { -20, 20 }, noise = 0.01 }
  rig:adc    { "speeds", of = { "axis.motor_speed", "stiff.out", "hiss" },
               skew = { 0, "1 us", "2 us" }, every = "200 us", takes = "4 us", average = 3,
               average_every = "600 ns" }
  rig:dac    { "bridge", to = "axis.voltage", bits = 11, range = { -24, 24 }, slew = 3e6 }
  rig:loop   { "loop", law = laws[p.kind], wanted = "wanted", measured = "current",
               output = "bridge", latency = timings[p.kind], lost = 0.02, missed = 0.01 }
  return rig
end

local study = lw.study { build, lasts = "20 ms", runs = 3, seed = 12, given = { kind = "uniform" } }
study:requirement { "rms", of = "axis.current", at_most = 100 }
for _, kind in ipairs { "overshoot", "peak time", "settling time", "rise time", "iae", "ise",
  "itae" } do
  study:metric { kind, of = "axis.current", against = "wanted" }
end
study:metric { "late", "latency percentile", of = "loop", share = "90 %" }
study:figure { "current", of = { "axis.current", "stiff.out" }, wanted = "wanted" }
study:figure { "latency", latency_of = "loop" }
return study
