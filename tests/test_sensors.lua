-- Encoders, filters before adcs, white noise on plants.

local lw = require "latewood"
local t = require "harness"

-- |got - want| <= tolerance, as it stands.
local function near(got, want, tolerance)
  local distance = math.abs(got - want)
  if distance ~= distance or distance > tolerance then
    error(("%.17g is not near %.17g by %.3g"):format(got, want, tolerance), 2)
  end
end

-- ---- encoders

-- An axis that turns at `speed` rad/s from `start` on.
local function turning(speed, start, encoder)
  local rig = lw.rig "axis"
  rig:plant { "axis", lw.plant.state_space { A = { { 0 } }, B = { { 1 } }, C = { { 1 } },
    start = { start or 0 }, inputs = { "speed" }, outputs = { "angle" } } }
  rig:source { "speed", lw.source.constant(speed) }:connect { "speed", to = "axis.speed" }
  encoder[1], encoder.of = "axis angle", "axis.angle"
  return rig:encoder(encoder)
end

t.test("counts_are_the_floor_of_the_angle_both_ways", function()
  for _, speed in ipairs { 7.3, -7.3 } do
    local rig = turning(speed, 0.1, { counts = 4096, every = "1 ms" })
    local run = rig:run { lasts = "200 ms", record = { "axis angle" } }
    local r = run:record "axis angle"
    t.equal(r.n, 201)
    for k = 1, r.n do
      local counts = (0.1 + speed * (k - 1) * 1e-3) * 4096 / (2 * math.pi)
      t.equal(r.value[k], math.floor(counts))
    end
  end
end)

t.test("an_angle_on_an_edge_has_reached_the_upper_count", function()
  -- turn and counts make an edge at each whole number, all exact in binary
  for _, case in ipairs { { 3, 3 }, { 2.9999, 2 }, { -3, -3 }, { -3.0001, -4 }, { 0, 0 } } do
    local rig = turning(0, case[1], { counts = 16, turn = 16, every = "1 ms" })
    t.equal(rig:run({ lasts = "1 ms" }):value "axis angle", case[2])
  end
  local rig = turning(0, 3, { counts = 16, turn = 16, zero = 1, every = "1 ms" })
  t.equal(rig:run({ lasts = 0 }):value "axis angle", 2)
end)

t.test("speed_by_count_is_off_by_at_most_one_count_over_its_window", function()
  for _, over in ipairs { 1, 10 } do
    local rig = turning(7.3, 0, { counts = 4096, every = "1 ms", speed_over = over })
    local run = rig:run { lasts = "300 ms",
      record = { { "axis angle speed", every = "1 ms", from = "50 ms" } } }
    local r = run:record "axis angle speed"
    -- common practice, no source: resolution 2 pi / (counts window)
    local resolution, worst = 2 * math.pi / (4096 * over * 1e-3), 0
    local sum = 0
    for k = 1, r.n do
      worst = math.max(worst, math.abs(r.value[k] - 7.3))
      sum = sum + r.value[k]
    end
    -- a floor is within one count, so is the difference of two; 1e-9: sums of doubles
    if worst > resolution + 1e-9 then
      error(("off by %g, resolution %g"):format(worst, resolution))
    end
    if worst < resolution / 50 then error "no rounding to counts was seen" end
    -- the mean over 250 samples: the ends of a telescoping sum, `over` counts at most each
    near(sum / r.n, 7.3, 2 * over * resolution / r.n)
  end
end)

-- A mass on a spring: angle = 0.1 sin(50 t) from the middle on.
local function swinging(encoder)
  local rig = lw.rig "axis"
  rig:plant { "axis", lw.plant.state_space { A = { { 0, 1 }, { -2500, 0 } }, B = { { 0 }, { 1 } },
    C = { { 1, 0 } }, start = { 0, 5 }, outputs = { "angle" } } }
  encoder[1], encoder.of = "turn", "axis.angle"
  return rig:encoder(encoder)
end

-- Instants at which the angle passes an edge, and which edge, up to `last`, from the arc sine.
local function edges_of_swing(counts, last)
  local q, times = 2 * math.pi / counts, {}
  for half = 0, math.floor(50 * last / math.pi) + 1 do
    local k0 = math.floor(0.1 / q)
    for k = -k0, k0 do
      local phase = half * math.pi + (half % 2 == 0 and 1 or -1) * lw.math.asin(k * q / 0.1)
      if phase > 0 and phase / 50 <= last then times[#times + 1] = { phase / 50, k } end
    end
  end
  table.sort(times, function(a, b) return a[1] < b[1] end)
  return times
end

t.test("edges_come_where_the_arc_sine_puts_them", function()
  local last, edges = 0.2, edges_of_swing(1000, 0.2)
  local run = swinging({ counts = 1000, every = "1 ms", speed_edges = 2 }):run { lasts = last,
    record = { { "turn.last", every = "100 us" }, { "turn.steps", every = "100 us" } } }
  local r, steps, k = run:record "turn.last", run:record "turn.steps", 0
  local function check(shift)
    k = 0
    for i = 1, r.n do
      while k < #edges and edges[k + 1][1] < r.time[i] do k = k + 1 end
      -- the edge at the start itself is where it begins; a tick, and rounding of the arc sine near
      -- the turn, where the angle stands for sqrt(2 * 1e-16 / 0.1) / 50 s
      if k > 0 then near(r.value[i], edges[k][1] + shift, 1e-9) end
      if k > 2 then t.equal(steps.value[i], edges[k][2] - edges[k - 2][2]) end
    end
  end
  check(0)
  if k < 90 then error(k .. " edges only") end
  -- deliberate fault: stamps a period of 100 MHz late are noticed
  t.equal(pcall(check, 1e-8), false)
end)

t.test("stamps_are_whole_periods_of_their_clock_before_the_edge", function()
  local edges = edges_of_swing(1000, 0.1)
  local run = swinging({ counts = 1000, every = "1 ms", speed_edges = 1, edge_clock = "30 kHz" })
    :run { lasts = "100 ms", record = { { "turn.last", every = "100 us" } } }
  local r, k = run:record "turn.last", 0
  for i = 1, r.n do
    while k < #edges and edges[k + 1][1] < r.time[i] do k = k + 1 end
    -- rounded down to the clock, whose instants are whole ticks
    if k > 0 then near(r.value[i], math.floor(edges[k][1] * 30e3) / 30e3, 1e-12) end
  end
end)

t.test("speed_by_time_is_good_to_the_period_of_its_clock", function()
  for _, case in ipairs { { 7.3, 1 }, { -7.3, 4 }, { 0.05, 1 } } do
    local speed, n = case[1], case[2]
    local rig = turning(speed, 0, { counts = 4096, every = "1 ms", speed_edges = n,
      edge_clock = "1 MHz" })
    local r = rig:run({ lasts = "300 ms",
      record = { { "axis angle speed", every = "1 ms", from = "100 ms" } } })
      :record "axis angle speed"
    -- common practice, no source: relative resolution is the clock's period over the time measured
    local span = n * 2 * math.pi / 4096 / math.abs(speed)
    for k = 1, r.n do near(r.value[k], speed, math.abs(speed) * 1e-6 / (span - 1e-6)) end
  end
end)

t.test("without_edges_the_speed_sinks_and_then_is_nothing", function()
  local rig = lw.rig "stop"
  rig:plant { "axis", lw.plant.integrator { gain = 1 } }
  rig:source { "speed", lw.source.step { at = "20.5 ms", from = 1, to = 0 } }
  rig:connect { "speed", to = "axis.in" }
  rig:encoder { "turn", of = "axis.out", counts = 1000, turn = 1, every = "1 ms", speed_edges = 1,
    zero_after = "10 ms" }
  local r = rig:run({ lasts = "40 ms", record = { { "turn speed", every = "1 ms" } } })
    :record "turn speed"
  -- the last edge is at 20 ms: afterwards less than a count in the time since; 1e-9: ticks in 1 ms
  near(r.value[21], 1, 1e-9)
  for k = 22, 29 do near(r.value[k + 1], 1 / (k - 20), 1e-9) end
  for k = 31, 40 do t.equal(r.value[k + 1], 0) end
end)

t.test("an_edge_passed_there_and_back_is_no_way_gone", function()
  local rig = lw.rig "back"
  rig:plant { "axis", lw.plant.integrator { gain = 1 } }
  rig:source { "speed", lw.source.step { at = "10.5 ms", from = 1, to = -1 } }
  rig:connect { "speed", to = "axis.in" }
  rig:encoder { "turn", of = "axis.out", counts = 1000, turn = 1, every = "1 ms", speed_edges = 1 }
  local r = rig:run({ lasts = "14 ms", record = { { "turn speed", every = "1 ms" } } })
    :record "turn speed"
  near(r.value[10], 1, 1e-9)
  t.equal(r.value[12], 0)                 -- up over edge 10 at 10 ms, down over it at 11 ms
  near(r.value[13], -1, 1e-9)
end)

t.test("a_loop_steps_on_an_encoder", function()
  local rig = lw.rig "axis"
  rig:plant { "axis", lw.plant.integrator { gain = 1 } }
  rig:encoder { "angle", of = "axis.out", counts = 1000, turn = 1, every = "1 ms", speed_over = 4 }
  rig:dac { "push", to = "axis.in" }
  rig:loop { "hold", law = lw.law.p { kp = 0.02 }, wanted = 500, measured = "angle",
    output = "push" }
  local run = rig:run { lasts = "1 s" }
  t.equal(run:status(), "done")
  -- x' = 0.02 (500 - counts): settles where counts = 500 to the count
  near(run:value "angle", 500, 1)
end)

-- ---- analog filters

-- Gain and phase of an adc's input for a sine, by correlation over whole periods.
local function response(options, frequency, periods, settle)
  local rig = lw.rig "probe"
  rig:plant { "wire", lw.plant.gain { gain = 1 } }
  rig:source { "tone", lw.source.sine { amplitude = 1, frequency = frequency } }
  rig:connect { "tone", to = "wire.in" }
  options[1], options.of = "out", "wire.out"
  rig:adc(options)
  local from, to = settle, settle + periods / frequency
  local run = rig:run { lasts = to + 1e-3, record = { "out" } }
  local r, re, im, n = run:record "out", 0, 0, 0
  for k = 1, r.n do
    local at = r.time[k]
    if at >= from - 1e-10 and at < to - 1e-10 then
      local phase = 2 * math.pi * frequency * at
      re, im, n = re + r.value[k] * lw.math.sin(phase), im + r.value[k] * lw.math.cos(phase), n + 1
    end
  end
  re, im = 2 * re / n, 2 * im / n
  return lw.math.hypot(re, im), lw.math.atan2(im, re)
end

t.test("analog_filters_are_3_db_down_at_their_cut_off", function()
  for _, kind in ipairs { "RC", "Butterworth", "Bessel" } do
    for order = 1, 8 do
      local gain = response({ every = "10 us",
        analog = { kind = kind, order = order, cut_off = "1 kHz" } }, 1000, 10, 0.03)
      -- definition of the cut-off; 1e-9: transients of 30 ms of a 1 kHz filter and sums of 1000
      near(gain, lw.math.exp(-0.5 * lw.math.log(2)), 1e-9)
    end
  end
end)

t.test("a_butterworth_filter_falls_by_its_order", function()
  for _, order in ipairs { 2, 4 } do
    local gain = response({ every = "10 us",
      analog = { kind = "Butterworth", order = order, cut_off = 1000 } }, 4000, 40, 0.03)
    -- common practice: 1 / sqrt(1 + (f/fc)^(2 n))
    near(gain, 1 / math.sqrt(1 + 4 ^ (2 * order)), 1e-9)
  end
end)

t.test("bessel_filters_delay_low_frequencies_alike", function()
  local function delay(frequency)
    local _, phase = response({ every = "10 us",
      analog = { kind = "Bessel", order = 4, cut_off = 1000 } }, frequency, 10, 0.03)
    return -phase / (2 * math.pi * frequency)
  end
  -- from memory: the 4th order has its half power at 2.114 times the inverse of its delay
  -- 1e-3 of it: the digits of that figure
  near(delay(100), 2.114 / (2 * math.pi * 1000), 1e-3 * 3.4e-4)
  near(delay(400), delay(100), 1e-3 * 3.4e-4)
end)

-- ---- decimation

local function sinc(order, ratio)
  return { filter = { "sinc", order = order, ratio = ratio, clock = "1 MHz" } }
end

t.test("a_sinc_filter_has_its_gain_and_its_group_delay", function()
  for order = 1, 4 do
    local ratio, f, T = 16, 5000, 1e-6
    local gain, phase = response(sinc(order, ratio), f, 20, 1e-3)
    -- common practice: (sin(pi f R T) / (R sin(pi f T)))^k, and sin(pi f T) / (pi f T) of the mean
    local sin = lw.math.sin
    local w = math.pi * f * T
    local exact = (sin(w * ratio) / (ratio * sin(w))) ^ order * sin(w) / w
    near(gain, exact, 1e-9)
    -- group delay of the filter k (R - 1) / 2 clocks, half a clock of the mean, 1 ps of the reading
    near(-phase / (2 * math.pi * f), (order * (ratio - 1) / 2 + 0.5) * T + 1e-12, 1e-14)
    -- deliberate fault: a delay of a whole window more is noticed
    t.equal(pcall(near, -phase / (2 * math.pi * f), (order * ratio / 2 + 0.5) * T, 1e-14), false)
  end
end)

t.test("a_sinc_filter_has_its_notches_at_the_output_rate", function()
  local rig = lw.rig "probe"
  rig:plant { "wire", lw.plant.gain { gain = 1 } }
  rig:source { "tone", lw.source.sine { amplitude = 1, frequency = 1e6 / 32, phase = 0.7 } }
  rig:connect { "tone", to = "wire.in" }
  local o = sinc(3, 32)
  o[1], o.of = "out", "wire.out"
  local run = rig:adc(o):run { lasts = "2 ms", record = { "out" } }
  local r = run:record "out"
  -- common practice: zeros at multiples of clock / ratio; the first three windows fill. 1e-9:
  -- rounding of an integral over a clock of 1e-6
  for k = 5, r.n do near(r.value[k], 0, 1e-9) end
end)

t.test("a_loop_steps_on_a_decimated_adc", function()
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.winding { resistance = 1, inductance = "1 mH" } }
  rig:adc { "current", of = "coil.current", bits = 12, range = { -16, 16 },
    filter = { "sinc", order = 3, ratio = 16, clock = "1 MHz" },
    analog = { order = 1, cut_off = "100 kHz" } }
  rig:dac { "bridge", to = "coil.voltage" }
  rig:loop { "control", law = lw.law.pi { kp = 1, ki = 500 }, wanted = 5, measured = "current",
    output = "bridge" }
  local run = rig:run { lasts = "100 ms" }
  t.equal(run:status(), "done")
  near(run:value "coil.current", 5, 32 / 4096)
  local text = table.concat(rig:describe(), "\n")
  for _, words in ipairs {
    "sinc filter of order 3, one value every 16 clocks; group delay 2.25e-05 s",
    "RC low pass of order 1, -3 dB at 100000 Hz" } do
    if not text:find(words, 1, true) then error("describe lacks: " .. words .. "\n" .. text) end
  end
end)

-- ---- white noise

local function noisy(extra)
  local rig = lw.rig "mass"
  rig:plant { "mass", lw.plant.state_space { A = { { -200 } }, B = { { 1, 3 } }, C = { { 1 } },
    inputs = { "force", "wind" }, outputs = { "speed" } } }
  rig:adc { "speed", of = "mass.speed", every = "1 ms" }
  rig:noise { "gusts", on = "mass.wind", density = 0.5 }
  if extra then extra(rig) end
  return rig
end

local function moments(r, from)
  local n, m, q, c = 0, 0, 0, 0
  for k = from, r.n do n, m, q = n + 1, m + r.value[k], q + r.value[k] ^ 2 end
  for k = from, r.n - 1 do c = c + r.value[k] * r.value[k + 1] end
  return m / n, q / n, c / (n - 1), n
end

t.test("white_noise_has_its_stationary_variance_and_memory", function()
  local run = noisy():run { lasts = "200 s", record = { "speed" }, seed = 5 }
  local m, q, c, n = moments(run:record "speed", 100)
  -- closed form of A X + X A' + Q = 0: b^2 density / (2 a)
  local variance = 9 * 0.5 / (2 * 200)
  local rho = lw.math.exp(-0.2)
  local effective = n * (1 - rho) / (1 + rho)
  -- five deviations of each estimate from so many independent draws
  near(m, 0, 5 * math.sqrt(variance / effective))
  near(q, variance, 5 * variance * math.sqrt(2 / effective))
  near(c / q, rho, 5 / math.sqrt(n))
  -- deliberate fault: one-sided density read as two-sided is noticed
  t.equal(pcall(near, q, variance / 2, 5 * variance * math.sqrt(2 / effective)), false)
end)

t.test("white_noise_on_an_oscillator_has_the_variances_of_its_lyapunov_equation", function()
  local rig = lw.rig "pair"
  rig:plant { "pair", lw.plant.state_space { A = { { 0, 1 }, { -1e4, -40 } }, B = { { 0 }, { 1 } },
    C = { { 1, 0 } } } }
  rig:adc { "place", of = "pair.out", every = "3 ms" }
  rig:adc { "speed", of = "pair.x2", every = "3 ms" }
  rig:noise { "hum", on = "pair.in", density = 2 }
  local run = rig:run { lasts = "300 s", record = { "place", "speed" } }
  local _, x = moments(run:record "place", 100)
  local _, v = moments(run:record "speed", 100)
  -- closed form of the Lyapunov equation of x'' = -w^2 x - c x' + noise: q / (2 c w^2), q / (2 c)
  -- 8 %: five deviations of 300 s with a memory of 2 / c = 50 ms each way
  near(x, 2 / (2 * 40 * 1e4), 0.08 * 2 / (2 * 40 * 1e4))
  near(v, 2 / (2 * 40), 0.08 * 2 / (2 * 40))
end)

t.test("white_noise_does_not_depend_on_the_grid_it_is_drawn_on_but_in_its_draws", function()
  local function variance(every, offset)
    local rig = lw.rig "mass"
    rig:plant { "mass", lw.plant.first_order { gain = 1, time_constant = "10 ms" } }
    rig:adc { "speed", of = "mass.out", every = every, offset = offset }
    rig:noise { "gusts", on = "mass.in", density = 1e-2 }
    local _, q = moments(rig:run({ lasts = "100 s", record = { "speed" } }):record "speed", 50)
    return q
  end
  -- density / (2 time constant); 8 %: five deviations of 100 s with a memory of 10 ms
  for _, case in ipairs { { "2 ms", 0 }, { "3 kHz", 0 }, { "2 ms", "0.7 ms" }, { "50 ms", 0 } } do
    near(variance(case[1], case[2]), 1e-2 / 2e-2, 0.5 * (case[1] == "50 ms" and 0.16 or 0.08))
  end
end)

t.test("white_noise_changes_no_other_draw_and_repeats", function()
  local function values(seed, noise)
    local rig = lw.rig "mass"
    rig:plant { "mass", lw.plant.integrator { gain = 1 } }
    rig:plant { "other", lw.plant.integrator { gain = 1 } }
    rig:adc { "place", of = "mass.out", every = "1 ms", noise = 0.1 }
    rig:adc { "far", of = "other.out", every = "1 ms", noise = 0.1 }
    if noise then rig:noise { "gusts", on = "mass.in", density = 1 } end
    local run = rig:run { lasts = "50 ms", seed = seed, record = { "place", "far" } }
    return table.concat(run:record("place").value, " "), table.concat(run:record("far").value, " ")
  end
  local place, far = values(1, true)
  local again = values(1, true)
  local quiet, far_quiet = values(1, false)
  t.equal(place, again)
  t.equal(far, far_quiet)
  if place == quiet or place == values(2, true) then error "the noise is not there" end
end)

t.test("adcs_slower_than_the_grid_by_whole_steps_see_white_noise", function()
  local run = noisy(function(rig) rig:adc { "slow", of = "mass.speed", every = "4 ms" } end)
      :run { lasts = "1 s", record = { "speed", "slow" } }
  local fast, slow = run:record "speed", run:record "slow"
  for k = 1, slow.n do t.equal(slow.value[k], fast.value[4 * (k - 1) + 1]) end
end)

t.test("describe_says_at_anchors", function()
  local text = table.concat(noisy():describe(), "\n")
  for _, words in ipairs { 'noise "gusts": white, density 0.5', "are at anchors" } do
    if not text:find(words, 1, true) then error("describe lacks: " .. words .. "\n" .. text) end
  end
end)

-- ---- what cannot be

local function refused(build, text)
  t.raises(build, text)
end

t.test("what_cannot_be_is_refused_in_words", function()
  local function with(f) return function() noisy(f):freeze { lasts = 1 } end end
  refused(with(function(r) r:adc { "odd", of = "mass.speed", every = "1.5 ms" } end),
    'adc "odd" looks at the plant away from its anchors')
  refused(with(function(r) r:comparator { "over", of = "mass.speed", above = 1 } end),
    "take held noise")
  local function noise(name, on, density)
    return with(function(r) r:noise { name, on = on, density = density } end)
  end
  refused(noise("more", "mass.wnd", 1), 'nearest "mass.wind"')
  refused(noise("more", "mass.wind", -1), "density is -1")
  refused(noise("gusts", "mass.wind", 1), "taken by a noise")
  refused(with(function(r)
    r:plant { "g", lw.plant.gain { gain = 1 } }:noise { "h", on = "g.in", density = 1 }
  end), "acts on output")
  local function encoder(counts, over)
    return with(function(r)
      r:encoder { "e", of = "mass.speed", counts = counts, every = "1 ms", speed_over = over }
    end)
  end
  refused(encoder(0), "counts is 0")
  refused(encoder(4, 65), "speed_over is 65")
  local function by_time(of, edges, over, zero_after)
    return with(function(r)
      r:plant { "wheel", lw.plant.integrator { gain = 1 } }:value { "place" }
      r:encoder { "e", of = of, counts = 4, every = "1 ms", speed_edges = edges, speed_over = over,
        zero_after = zero_after }
    end)
  end
  refused(by_time("wheel.out", 65), "speed_edges is 65")
  refused(by_time("wheel.out", 1, 2), "state one of them")
  refused(by_time("wheel.out", 1, nil, 0), "zero_after is 0")
  refused(by_time("place", 1), '"place" is no signal of a plant')
  refused(by_time("mass.speed", 1), "take held noise")
  local function adc(every, analog, filter)
    return with(function(r)
      r:adc { "a", of = "mass.speed", every = every, analog = analog, filter = filter }
    end)
  end
  refused(adc(1, { cut_off = "1 s" }), "cut_off")
  refused(adc(1, { cut_off = 5, order = 9 }), "analog order is 9")
  local clock = "1 MHz"
  refused(adc(1, nil, { "sinc", order = 3, ratio = 8, clock = clock }), "has its own clock")
  refused(adc(nil, nil, { "boxes", order = 3, ratio = 8, clock = clock }), "kind of filter")
  refused(adc(nil, nil, { "sinc", order = 5, ratio = 8, clock = clock }), "filter order is 5")
end)

t.finish()
