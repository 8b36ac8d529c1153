-- Pulse-width modulated outputs from Lua: peak-current control, edges, trips, delay, samples by the
-- carrier, refusals.

local lw = require "latewood"
local t = require "harness"

local R, L, SUPPLY, T = 0.05, 1e-3, 24, 50e-6

-- A winding under peak-current control, wanted current so that the share comes to about `share`.
local function peaked(share, slope, more)
  local rig = lw.rig "coil"
  local peak = { current = "coil.current", wanted = share * SUPPLY / R, slope = slope }
  local pwm = { "bridge", to = "coil.voltage", carrier = T, supply = SUPPLY, peak = peak }
  for k, v in pairs(more or {}) do peak[k] = v end
  -- starts on its mean current, so that the peaks are reached within the first periods
  rig:plant { "coil", lw.plant.state_space { A = { { -R / L } }, B = { { 1 / L } }, C = { { 1 } },
    states = { "i" }, inputs = { "voltage" }, outputs = { "current" },
    start = { share * SUPPLY / R - 0.4 } } }
  return rig:pwm(pwm)
end

local function edges(rig, lasts)
  local run = rig:run { lasts = lasts, record = { "bridge.level" } }
  t.equal(run:status(), "done")
  return run:record("bridge.level")
end

-- Shares of the pulses.
local function shares(rig, lasts)
  local e, list = edges(rig, lasts), {}
  for k = 1, e.n do
    if e.level[k] == 0 and k > 1 then list[#list + 1] = e.duty[k] end
  end
  return list
end

local function after(i, volts, time)
  return volts / R + (i - volts / R) * math.exp(-R / L * time)
end

t.test("it_switches_off_at_the_first_tick_at_or_after_the_peak", function()
  for _, slope in ipairs { 0, 9e3 } do
    local wanted = 0.4 * SUPPLY / R
    local e = edges(peaked(0.4, slope), 40 * T)
    local i, at, level, began, seen = wanted - 0.4, 0, 0, 0, 0
    for k = 1, e.n do
      i = after(i, level, e.time[k] - at)
      if e.level[k] == 0 and k > 1 then
        local fall = after(i, SUPPLY, -1e-12)
        local gap = i - (wanted - slope * (e.time[k] - began))
        -- the current and its closed form here agree to some 1e-15 of 480 A a step, over 80 steps;
        -- a tick is 1.4e-8 A and more
        if gap < -1e-9 or fall - (wanted - slope * (e.time[k] - 1e-12 - began)) > 1e-9 then
          error(("pulse at %.17g is %g beyond"):format(e.time[k], gap))
        end
        seen = seen + 1
      else
        began = e.time[k]
      end
      at, level = e.time[k], e.level[k]
    end
    t.equal(seen, 40)
  end
end)

-- Spread of the shares over the last 20 of 120 pulses.
local function unrest(share, slope)
  local list, lo, hi = shares(peaked(share, slope), 120 * T), 1, 0
  for k = #list - 19, #list do
    lo, hi = math.min(lo, list[k]), math.max(hi, list[k])
  end
  return hi - lo
end

t.test("above_a_share_of_one_half_it_needs_slope_compensation", function()
  -- common practice, no source: a difference is multiplied by -(m2 - s) / (m1 + s) a period, with
  -- the slopes m1 up and m2 down; stable for all shares where s is at least m2 / 2
  t.equal(unrest(0.4, 0) < 1e-6, true) -- 0.67^100 is 4e-18
  t.equal(unrest(0.6, 0) > 0.05, true)
  local m2 = 0.6 * SUPPLY / L
  t.equal(unrest(0.6, m2 / 2) < 1e-6, true)
  t.equal(unrest(0.6, m2 / 40) > 0.05, true) -- deliberate fault: too little of it
end)

t.test("a_difference_changes_sign_and_grows_by_the_ratio_of_the_slopes", function()
  local s = 2e3
  local list = shares(peaked(0.4, s), 8 * T)
  local m1, m2 = 0.6 * SUPPLY / L, 0.4 * SUPPLY / L
  -- common practice, no source; slopes of the exponential differ by T R / L, 0.25 %, and the mean
  -- of the current by the ripple's part
  t.near((list[4] - list[3]) / (list[3] - list[2]), -(m2 - s) / (m1 + s), 0.01, 1)
end)

t.test("blanking_and_the_greatest_share_bound_the_pulse", function()
  -- far above what is wanted: off at the end of blanking
  for _, share in ipairs(shares(peaked(0.4, 0, { wanted = 10, blanking = "2 us" }), 3 * T)) do
    t.near(share, 0.04, 1e-12)
  end
  for _, share in ipairs(shares(peaked(0.4, 0, { wanted = 1e4, most_duty = 0.9 }), 3 * T)) do
    t.near(share, 0.9, 1e-12)
  end
  local e = edges(peaked(0.4, 0, { wanted = 1e4 }), 5 * T) -- never off
  t.equal(e.n, 1)
end)

t.test("the_wanted_current_may_be_a_value_or_a_moving_source", function()
  local rig = peaked(0.4, 0, { wanted = "ramp" })
  rig:source { "ramp", lw.source.ramp { slope = 1e3, from = 0.4 * SUPPLY / R } }
  rig:adc { "at the valley", of = "coil.current", at = "bridge" }
  local run = rig:run { lasts = 40 * T, record = { { "coil.current", at = { 39.9 * T } } } }
  local wanted, got = 0.4 * SUPPLY / R + 1e3 * 40 * T, run:record("coil.current").value[1]
  t.equal(got < wanted and got > wanted - 0.6, true) -- within the ripple, 0.29 A, and a period
end)

t.test("a_trip_acts_on_a_bridge_at_once", function()
  for _, averaged in ipairs { false, true } do
    for _, shape in ipairs { "trailing", "leading", "centre" } do
      local rig = lw.rig "guard"
      rig:plant { "coil", lw.plant.winding { resistance = R, inductance = L } }
      rig:pwm { "bridge", to = "coil.voltage", carrier = T, supply = SUPPLY, start = 0.9,
        shape = shape, averaged = averaged }
      rig:comparator { "over", of = "coil.current", above = 5 }
      rig:trip { "off", by = "over", output = "bridge", to = 0, lasts = "until end" }
      local run = rig:run { lasts = "2 ms", record = { "over", "bridge.level" } }
      local over, e = run:record("over"), run:record("bridge.level")
      local at
      for k = 1, e.n do
        if e.level[k] > 0 then at = nil elseif at == nil then at = e.time[k] end
      end
      t.equal(at, over.time[1])
    end
  end
  local rig = peaked(0.4, 0)
  rig:comparator { "over", of = "coil.current", above = 0.4 * SUPPLY / R - 0.1, start = 0 }
  rig:trip { "off", by = "over", output = "bridge", to = 0, lasts = "until end" }
  local e = edges(rig, 20 * T)
  t.equal(e.n, 2) -- on at the first valley, off at the trip
end)

-- Phase of the first harmonic of the level against the sine that is sampled [degrees].
local function lag(reload, latency)
  local rig, f = lw.rig "delay", 2000
  rig:plant { "x", lw.plant.first_order { time_constant = 1e-3 } }
  rig:source { "sine", lw.source.sine { amplitude = 0.4, frequency = f } }
  rig:pwm { "bridge", to = "x.in", carrier = T, shape = "centre", averaged = true,
    bridge = "bipolar", reload = reload }
  rig:adc { "sample", of = "sine", at = "bridge" }
  rig:loop { "through", law = lw.law.p { kp = 1 }, wanted = "sample", measured = 0,
    output = "bridge", on = "sample", latency = latency }
  local e = edges(rig, 30 * T)
  local w, re, im = 2 * math.pi * f, 0, 0
  local from, to = 10 * T, 20 * T -- one period of the sine
  for k = 1, e.n - 1 do
    local a, b = math.max(e.time[k], from), math.min(e.time[k + 1], to)
    if b > a then
      re = re + e.level[k] * (math.sin(w * b) - math.sin(w * a)) / w
      im = im + e.level[k] * (math.cos(w * b) - math.cos(w * a)) / w
    end
  end
  return -math.deg(math.atan(re, -im))
end

t.test("one_update_a_period_lags_by_one_and_a_half_samples", function()
  -- from memory: the 1.5 sample rule of digitally controlled converters, 54 degrees at fs/10, of
  -- which half a period of hold 18
  t.near(-lag("valley", "90 %"), -54, 1e-6, 180)
  t.near(-lag("both", "40 %"), -36, 1e-6, 180) -- the peak half a period later takes it
  t.near(-lag("at once", nil), -18, 1e-6, 180)
end)

t.test("edges_come_as_records_and_the_share_as_a_signal", function()
  local rig = lw.rig "edges"
  rig:plant { "coil", lw.plant.winding { resistance = R, inductance = L } }
  rig:pwm { "bridge", to = "coil.voltage", carrier = T, supply = SUPPLY, start = 0.3 }
  rig:adc { "level", of = "bridge.level", at = "bridge", phase = "20 %" }
  rig:adc { "share", of = "bridge.duty", at = "bridge" }
  local run = rig:run { lasts = 4.5 * T, record = { "bridge.level", "level", "share" } }
  local e = run:record("bridge.level")
  t.equal(e.n, 10)
  for k = 1, 10 do
    t.equal(e.level[k], k % 2 == 1 and SUPPLY or 0)
    t.near(e.time[k], ((k - 1) // 2 + (k % 2 == 1 and 0 or 0.3)) * T, 1e-12, T)
  end
  t.equal(run:record("level").value[2], SUPPLY)
  t.equal(run:record("share").value[3], 0.3)
end)

local function refused(pattern, fields, more)
  local rig = lw.rig "bad"
  rig:plant { "coil", lw.plant.winding { resistance = R, inductance = L } }
  local pwm = { "bridge", to = "coil.voltage", carrier = T, supply = SUPPLY }
  for k, v in pairs(fields) do pwm[k] = v end
  local ok, message = pcall(function()
    rig:pwm(pwm)
    if more then more(rig) end
    local run, why = rig:run { lasts = T }
    if not run then error(why, 0) end
  end)
  t.equal(ok, false)
  if not tostring(message):find(pattern, 1, true) then
    error(("%q is not in %q"):format(pattern, tostring(message)), 2)
  end
end

t.test("what_does_not_fit_is_refused_by_name", function()
  local peak = { current = "coil.current", wanted = 3 }
  refused('pwm "bridge": peak: current is missing', { peak = { wanted = 3 } })
  refused('pwm "bridge": peak: wanted is missing', { peak = { current = "coil.current" } })
  refused("a switched pwm of trailing shape", { peak = peak, shape = "centre" })
  refused("have no place beside it", { peak = peak, counts = 100 })
  refused("peak.most_duty is 1.5",
    { peak = { current = "coil.current", wanted = 3, most_duty = 1.5 } })
  refused("peak.slope is -1", { peak = { current = "coil.current", wanted = 3, slope = -1 } })
  refused("less than most_duty of a period",
    { peak = { current = "coil.current", wanted = 3, blanking = "60 us" } })
  refused("peak.current is to be a signal of a plant",
    { peak = { current = "bridge", wanted = 3 } })
  refused('nearest "coil.current"', { peak = { current = "coil.curent", wanted = 3 } })
  refused('"loop" writes to it', { peak = peak }, function(rig)
    rig:adc { "sample", of = "coil.current", at = "bridge" }
    rig:loop { "loop", law = lw.law.p { kp = 1 }, wanted = 1, measured = "sample", output = "bridge" }
  end)
  refused('no pwm "leg" was added before', {}, function(rig)
    rig:adc { "sample", of = "coil.current", at = "leg" }
  end)
  refused("phase is", {}, function(rig)
    rig:adc { "sample", of = "coil.current", at = "bridge", phase = "120 %" }
  end)
end)

t.test("a_bridge_is_described_in_words", function()
  local text = peaked(0.4, 9e3, { blanking = "300 ns", most_duty = 0.9 }):describe()
  text = table.concat(text, "\n")
  for _, words in ipairs { "peak current", "coil.current", "300 ns", "0.9" } do
    if not text:find(words, 1, true) then error(words .. " is missing in:\n" .. text) end
  end
end)

t.finish()
