-- Metrics of whole loops against the same computed from a dense record: least and largest values,
-- integrals, turns, crossings and masks, between samples and at samples.

local harness = require "harness"
local lw = require "latewood"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises

-- A current loop whose plant swings between its samples; with much gain it does not settle.
local function rig_of(kp, ki)
  local rig = lw.rig "mount current"
  rig:plant { "axis", lw.plant.second_order { gain = 1, natural_frequency = 9000, damping = 0.1 } }
  rig:source { "wanted", lw.source.step { at = "0.5 ms", to = 1.5 } }
  rig:adc { "current", of = "axis.out", every = "250 us", bits = 12, range = { -8, 8 } }
  rig:dac { "bridge", to = "axis.in", range = { -24, 24 } }
  rig:loop { "control", law = lw.law.pi { kp = kp or 0.2, ki = ki or 2200 }, wanted = "wanted",
    measured = "current", output = "bridge", latency = "37 %" }
  return rig
end

local LASTS, FROM, LEVEL = 12e-3, 0.5e-3, 1.5
local mask = { { 0, -1, 1.2 }, { "2 ms", -1, 2 }, { "4 ms", 0.9, 1.7 }, { "11 ms", 1.3, 1.6 } }

local asked = { "maximum", "minimum", "ripple", "undershoot", "overshoot", "total variation",
  "control effort", "itse", "iae", "itae", "ise", "rms", "mean error", "settling time", "rise time",
  "mask violation", "time outside mask", "first outside mask" }

local function metrics_of(of)
  local list = {}
  for i, kind in ipairs(asked) do
    list[i] = { kind, of = of, level = LEVEL, base = 0, from = FROM, band = "20 %",
      mask = kind:find "mask" and mask or nil }
  end
  return list
end

-- ---- the same from rows

local function limits_at(t)
  local times = { 0, 2e-3, 4e-3, 11e-3 }
  for k = 1, 3 do
    if t >= times[k] and t < times[k + 1] then
      local s = (t - times[k]) / (times[k + 1] - times[k])
      return mask[k][2] + s * (mask[k + 1][2] - mask[k][2]),
        mask[k][3] + s * (mask[k + 1][3] - mask[k][3])
    end
  end
  return -math.huge, math.huge
end

-- From rows a step apart: sums by the trapezoidal rule.
local function by_rows(record)
  local v = { maximum = -math.huge, minimum = math.huge }
  for _, name in ipairs { "total variation", "control effort", "itse", "iae", "itae", "ise",
                          "mean error", "mask violation", "time outside mask" } do v[name] = 0 end
  local n = #record.time
  local low, high
  for i = 1, n do
    local t, y = record.time[i] - FROM, record.value[i]
    local e, h = y - LEVEL, (record.time[2] - record.time[1]) * ((i == 1 or i == n) and 0.5 or 1)
    v.maximum, v.minimum = math.max(v.maximum, y), math.min(v.minimum, y)
    if i > 1 then
      v["total variation"] = v["total variation"] + math.abs(y - record.value[i - 1])
    end
    v["control effort"] = v["control effort"] + h * y * y
    v.itse, v.ise = v.itse + h * t * e * e, v.ise + h * e * e
    v.iae, v.itae = v.iae + h * math.abs(e), v.itae + h * t * math.abs(e)
    v["mean error"] = v["mean error"] + h * e / (LASTS - FROM)
    if math.abs(e) > 0.2 * LEVEL then v["settling time"] = t end
    if not low and y >= 0.1 * LEVEL then low = t end
    if not high and y >= 0.9 * LEVEL then high = t end
    local lo, hi = limits_at(t)
    local over = math.max(y - hi, lo - y)
    v["mask violation"] = math.max(v["mask violation"], over)
    if over > 0 then
      v["time outside mask"] = v["time outside mask"] + h
      v["first outside mask"] = v["first outside mask"] or t
    end
  end
  v["rise time"] = high - low
  v.rms = (v["control effort"] / (LASTS - FROM)) ^ 0.5
  v.ripple = v.maximum - v.minimum
  v.overshoot = math.max(v.maximum - LEVEL, 0) / LEVEL
  v.undershoot = math.max(-v.minimum, 0) / LEVEL
  return v
end

-- Rows every `every`; differences relative to the larger of the value and the size of the signal.
local function differences(every, kp, ki)
  local run = rig_of(kp, ki):run { lasts = LASTS, metrics = metrics_of "axis.out",
    record = { { "axis.out", every = every, from = FROM } } }
  local v, list = by_rows(run:record(1)), {}
  for _, kind in ipairs(asked) do
    list[kind] = math.abs(run:metric(kind) - v[kind]) / math.max(math.abs(v[kind]), 1e-3)
    if kind:find "time" or kind:find "first" then
      list[kind] = math.abs(run:metric(kind) - v[kind]) -- seconds
    end
  end
  return list
end

local function instants(kind)
  return kind == "settling time" or kind == "rise time" or kind == "first outside mask"
end

test("metrics_agree_with_a_dense_record", function()
  for i, gains in ipairs { { 0.2, 2200 }, { 0.5, 1500 } } do
    local off = differences("0.2 us", gains[1], gains[2]) -- a 3500th of a swing
    for _, kind in ipairs(asked) do
      -- extremes and sums: some of the square of that; instants: up to the steps; time outside: up
      -- to a step an end
      local most = instants(kind) and 0.41e-6 or kind == "time outside mask" and 4e-6 or 1e-6
      local never = i == 2 and kind == "settling time" -- outside the band at the end
      equal(never or off[kind] <= most, true, ("%s: off by %g"):format(kind, off[kind]))
    end
  end
end)

test("a_coarse_record_does_not_agree", function() -- the twin: what lies between samples is missed
  local off = differences "250 us"
  for _, kind in ipairs { "maximum", "ripple", "overshoot", "total variation", "iae",
                          "mask violation" } do
    equal(off[kind] > 1e-3, true, ("%s: off by %g"):format(kind, off[kind]))
  end
end)

-- ---- at samples

test("metrics_of_an_adc_are_those_at_its_samples", function()
  local kinds = { "ripple", "overshoot", "maximum" }
  local list = {}
  for _, kind in ipairs(kinds) do
    list[#list + 1] = { kind, of = "axis.out", level = LEVEL, base = 0, from = FROM }
    list[#list + 1] = { kind .. " at samples", kind, of = "current", level = LEVEL, base = 0,
      from = FROM }
  end
  local run = rig_of():run { lasts = LASTS, metrics = list, record = { "current" } }
  local record, lo, hi = run:record "current", math.huge, -math.huge
  for i = 1, record.n do
    if record.time[i] >= FROM then
      lo, hi = math.min(lo, record.value[i]), math.max(hi, record.value[i])
    end
  end
  equal(run:metric "maximum at samples", hi)
  equal(run:metric "ripple at samples", hi - lo)
  near(run:metric "overshoot at samples", math.max(0, hi - LEVEL) / LEVEL, 1e-15)
  for _, kind in ipairs(kinds) do -- more happens between
    equal(run:metric(kind) > run:metric(kind .. " at samples") * 1.01, true, kind)
  end
end)

test("an_undamped_swing_between_samples_is_no_ripple_at_samples", function()
  local rig = lw.rig "hidden"
  rig:plant { "axis", lw.plant.second_order { gain = 1, natural_frequency = 2 * math.pi * 1000,
    damping = 0 } }
  rig:source { "push", lw.source.constant(1) }
  rig:connect { "push", to = "axis.in" }
  rig:adc { "current", of = "axis.out", every = "1 ms" }
  local run = rig:run { lasts = "6.5 ms", metrics = { { "ripple", of = "axis.out" },
    { "seen", "ripple", of = "current" }, { "last", "ripple", of = "axis.out", last = "250 us" },
    { "effort", "iae", of = "axis.out", level = 0, to = "6 ms" } } }
  near(run:metric "ripple", 2, 1e-12) -- 1 - cos
  near(run:metric "seen", 0, 1e-12, 1)
  near(run:metric "last", 1, 1e-12) -- from the mean to the peak
  near(run:metric "effort", 6e-3, 1e-12) -- integral of |1 - cos| over whole turns
end)

-- ---- ages and gaps

test("percentiles_of_ages_and_gaps_count_outputs", function()
  local rig = lw.rig "ages"
  rig:plant { "axis", lw.plant.integrator { gain = 250 } }
  rig:adc { "speed", of = "axis.out", every = "100 us" }
  rig:dac { "bridge", to = "axis.in" }
  rig:loop { "control", law = lw.law.p { kp = 0.1 }, wanted = 1, measured = "speed",
    output = "bridge", latency = { "10 us", "70 us" } }
  local function percentile(name, kind, share)
    return { name, kind, of = "bridge", share = share, from = "1 ms" }
  end
  local run = rig:run { lasts = "9 ms", metrics = {
    percentile("young", "output age percentile", "30 %"),
    percentile("old", "output age percentile", "90 %"),
    percentile("short", "gap between outputs percentile", "30 %"),
    percentile("long", "gap between outputs percentile", "90 %"),
    { "largest", "output age", of = "bridge", from = "1 ms" } } }
  -- outputs at 10, 170, 210, 370 us: just before the next one they are 170 and 110 us old
  near(run:metric "young", 110e-6, 1e-3) -- cells of 0.1 %
  near(run:metric "old", 170e-6, 1e-3)
  near(run:metric "short", 40e-6, 1e-3)
  near(run:metric "long", 160e-6, 1e-3)
  near(run:metric "largest", 170e-6, 1e-12)
end)

test("a_last_part_is_one_of_signals", function()
  raises(function()
    rig_of():run { lasts = "1 ms", metrics = { { "latency mean", of = "control", last = "1 us" } } }
  end, "last has no place in this metric")
  raises(function()
    rig_of():run { lasts = "1 ms", metrics = { { "ripple", of = "axis.out", last = -1 } } }
  end, "last")
end)

-- M-34, from memory: samples taken with a jitter of t_j have 20 log10(1 / (2 pi f t_j)) dB; 1 MHz
-- and 10 ps: 84.04 dB.
test("jittered_samples_have_the_known_noise", function()
  local f, jitter, signal, noise = 1e6, 10e-12, 0, 0
  for k = 1, 20000 do
    local phase = 2 * math.pi * 0.618033988749895 * k
    local late = jitter * lw.normal_quantile(lw.draw(1, 0, "aperture", k))
    local d = lw.math.sin(phase + 2 * math.pi * f * late) - lw.math.sin(phase)
    signal, noise = signal + lw.math.sin(phase) ^ 2, noise + d * d
  end
  near(10 * math.log(signal / noise, 10), 84.04, 0.15 / 84) -- 20000 draws: 0.06 dB one sigma
end)

harness.finish()
