-- Comparators and trips: instants on the exact solution, what they set off, and when.

local lw = require "latewood"
local t = require "harness"

local PS = 1e-12
-- An instant is a whole picosecond at or after the crossing, and the crossing is known to 1e-12 of
-- the time it takes (the state's own accuracy), read as a double of seconds.
local function at_or_after(got, exact)
  local slack = 1e-12 * exact + 1e-3 * PS
  if got < exact - slack or got > exact + PS + slack then
    error(("instant %.17g is not the first picosecond after %.17g"):format(got, exact), 2)
  end
end

local function coil(volts)
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.winding { resistance = 1.5, inductance = "3 mH" } }
  rig:source { "volts", lw.source.constant(volts or 24) }
  return rig:connect { "volts", to = "coil.voltage" }
end

-- An integrator that a dac drives with a slope of 1.
local function slope()
  local rig = lw.rig "slope"
  rig:plant { "x", lw.plant.integrator { gain = 1 } }
  return rig:dac { "push", to = "x.in", start = 1 }
end

local function edges(rig, lasts, name)
  local run = rig:run { lasts = lasts, record = { name } }
  t.equal(run:status(), "done")
  return run:record(name)
end

t.test("a_crossing_is_the_first_tick_at_or_after_the_exact_instant", function()
  local rig = coil():comparator { "over", of = "coil.current", above = 8, hysteresis = 0.5 }
  local r = edges(rig, "10 ms", "over")
  t.equal(r.n, 1)
  -- common practice: i = v / R (1 - exp(-t R / L))
  local exact = -3e-3 / 1.5 * lw.math.log(1 - 8 * 1.5 / 24)
  t.near(r.crossed[1], exact, 1e-12)
  at_or_after(r.time[1], exact)
  -- deliberate fault: a threshold two parts in a million million away is noticed
  local off = -3e-3 / 1.5 * lw.math.log(1 - 8 * (1 + 2e-11) * 1.5 / 24)
  t.equal(pcall(t.near, off, exact, 1e-12), false)
end)

t.test("every_zero_of_an_undamped_oscillation_is_found", function()
  local rig = lw.rig "swing"
  rig:plant { "arm", lw.plant.state_space { A = { { 0, 1 }, { -4e6, 0 } }, B = { { 0 }, { 0 } },
    C = { { 1, 0 } }, start = { 1, 0 } } }
  rig:comparator { "positive", of = "arm.out", above = 0, edge = "both" }
  local r = edges(rig, "100 ms", "positive")
  -- cos(2000 t) has its zeros at (k - 1/2) pi / 2000
  t.equal(r.n, math.floor(0.1 * 2000 / math.pi + 0.5))
  for k = 1, r.n do
    local exact = (k - 0.5) * math.pi / 2000
    -- 1e-12 a transition of the grid, which is 1 / norm = 1/2000 s long; slope 2000: so much a radian
    t.near(r.crossed[k], exact, 1e-12 * (1 + exact * 2000), 1 / 2000)
    t.equal(r.value[k], k % 2 == 1 and 0 or 1)
  end
end)

t.test("a_moving_source_may_be_the_level", function()
  local rig = slope()
  rig:source { "limit", lw.source.ramp { at = 0, slope = -1, from = 2 } }
  rig:comparator { "met", of = "x.out", above = "limit" }
  t.same_list(edges(rig, "3 s", "met").time, { 1 })
  rig = slope()
  rig:source { "limit", lw.source.sine { amplitude = 0.1, frequency = "1 Hz", offset = 0.5 } }
  rig:comparator { "met", of = "x.out", above = "limit", start = 0 }
  local r = edges(rig, "3 s", "met")
  t.equal(r.n, 1)
  t.near(r.crossed[1] - 0.5 - 0.1 * lw.math.sin(2 * math.pi * r.crossed[1]), 0, 1e-11, 1)
end)

t.test("a_value_may_be_the_level_and_counts_when_it_changes", function()
  local rig = slope()
  rig:source { "limit", lw.source.step { at = "1.5 s", from = 9, to = 1 } }
  rig:comparator { "met", of = "x.out", above = "limit" }
  local r = edges(rig, "3 s", "met")
  -- a jump at 1.5 s makes it true: one tick later
  t.same_list(r.time, { 1.5 + PS })
  t.same_list(r.crossed, { 1.5 })
end)

t.test("a_condition_made_true_by_a_jump_counts_one_tick_later", function()
  local rig = lw.rig "gain"
  rig:plant { "amplifier", lw.plant.gain { gain = 2 } }
  rig:source { "in", lw.source.step { at = "1 ms", from = 0, to = 3 } }
  rig:connect { "in", to = "amplifier.in" }
  rig:comparator { "high", of = "amplifier.out", above = 5 }
  t.same_list(edges(rig, "2 ms", "high").time, { 1e-3 + PS })
end)

t.test("below_is_the_mirror_of_above", function()
  local rig = coil():comparator { "under", of = "coil.current", below = 8, hysteresis = 0.25 }
  local r = edges(rig, "10 ms", "under")
  t.same_list(r.value, { 0 })
  at_or_after(r.time[1], -2e-3 * lw.math.log(1 - 8.25 / 16))
end)

t.test("a_comparator_between_two_plants_joins_them", function()
  local rig = slope()
  rig:plant { "y", lw.plant.state_space { A = { { 0 } }, B = { { 0 } }, C = { { 1 } },
    start = { 2 } } }
  rig:comparator { "met", of = "x.out", above = "y.out" }
  t.same_list(edges(rig, "3 s", "met").time, { 2 })
  local groups = 0
  for _, line in ipairs(rig:describe { lasts = "3 s" }) do
    groups = groups + (line:find("^group of") and 1 or 0)
  end
  t.equal(groups, 1)
end)

t.test("delay_and_blanking_do_what_they_say", function()
  local rig = slope():comparator { "met", of = "x.out", above = 1, delay = "250 ms" }
  local r = edges(rig, "3 s", "met")
  t.same_list(r.time, { 1.25 })
  t.same_list(r.crossed, { 1 })
  -- cos(2 pi t) falls through 0 at 0.25, then rises at 0.75 within the blanking; at its end, 1.05,
  -- it is above; the fall at 1.25 is again too soon
  rig = lw.rig "swing"
  rig:plant { "arm", lw.plant.state_space { A = { { 0, 2 * math.pi }, { -2 * math.pi, 0 } },
    B = { { 0 }, { 0 } }, C = { { 1, 0 } }, start = { 1, 0 } } }
  rig:comparator { "positive", of = "arm.out", above = 0, blanking = "0.8 s" }
  r = edges(rig, "1.5 s", "positive")
  t.equal(r.n, 2)
  t.near(r.time[1], 0.25, 1e-11)
  t.near(r.time[2], 1.05, 1e-11)
end)

t.test("a_relay_with_hysteresis_keeps_its_period", function()
  local rig = slope()
  rig:comparator { "high", of = "x.out", above = 1, hysteresis = 2 }
  rig:trip { "turn", by = "high", output = "push", to = -1, lasts = "until clear" }
  -- slope +-1 between -1 and 1: a period of 4 s, the first turn at 1 s
  t.same_list(edges(rig, "10 s", "high").time, { 1, 3, 5, 7, 9 })
  local run = rig:run { lasts = "10 s", metrics = { { "top", "maximum", of = "x.out" },
    { "bottom", "minimum", of = "x.out" } } }
  t.near(run:metric "top", 1, 1e-12)
  t.near(run:metric "bottom", -1, 1e-12)
end)

t.test("chatter_ends_the_run_with_a_status", function()
  local rig = slope()
  rig:comparator { "high", of = "x.out", above = 1 }
  rig:trip { "turn", by = "high", output = "push", to = -1, lasts = "until clear" }
  local status, message = rig:run { lasts = "10 s" }:status()
  t.equal(status, "LW_ERR_CHATTER")
  t.equal(message:find("hysteresis", 1, true) ~= nil, true)
end)

t.test("a_trip_holds_for_its_time_and_gives_back_what_was_written", function()
  local rig = coil(0)
  rig = slope()
  rig:value { "asked", start = 1 }
  rig:adc { "clock", of = "x.out", every = "1 s" }
  rig:loop { "write", law = lw.law.own { outputs = { "out" }, step = function(measured, job)
    return 1 + job + 0 * measured
  end }, measured = "clock", output = "push" }
  rig:comparator { "high", of = "x.out", above = 2.5 }
  rig:trip { "stop", by = "high", output = "push", to = 0, lasts = "1.2 s" }
  -- slopes 1, 2, ...: x is 2.5 at 1.75 s, stays there, and is still high when the time is over
  local run = rig:run { lasts = "6 s", record = { "push", "high" } }
  t.equal(run:value "push", 0)
  t.equal(run:value "push.asked", 7)
  t.near(run:value "x.out", 2.5, 1e-12)
end)

t.test("a_trip_until_the_latch_ends_at_the_first_edge_that_is_clear", function()
  local rig = lw.rig "peak"
  rig:plant { "coil", lw.plant.first_order { gain = 1, time_constant = "1 ms" } }
  rig:dac { "bridge", to = "coil.in", latch = "100 us", start = 10 }
  rig:comparator { "peak", of = "coil.out", above = 2, hysteresis = 0 }
  rig:trip { "off", by = "peak", output = "bridge", to = 0, lasts = "until latch" }
  local run = rig:run { lasts = "1 ms", record = { "bridge", "peak" } }
  t.equal(run:status(), "done")
  local r = run:record "bridge"
  -- at 2 the current falls, is below at once, and at the next edge the bridge is on again
  local first = 1e-3 * lw.math.log(10 / 8)
  at_or_after(r.time[1], first)
  t.equal(r.value[1], 0)
  t.near(r.time[2], 300e-6, 1e-12)
  t.equal(r.value[2], 10)
  -- from then on one turn a period: 2 exp(-a) + 10 (1 - exp(-b)) with a + b = 0.1
  for k = 4, r.n - 1, 2 do
    t.near(r.time[k] - r.time[k - 2], 1e-4, 1e-9)
  end
end)

t.test("a_trip_holds_the_level_of_a_pwm_until_its_next_period", function()
  local rig = lw.rig "limited"
  rig:plant { "coil", lw.plant.winding { resistance = 0.5, inductance = "1 mH" } }
  rig:pwm { "leg", to = "coil.voltage", carrier = "10 kHz", shape = "trailing", supply = 24,
    start = 0.8 }
  rig:comparator { "peak", of = "coil.current", above = 3 }
  rig:trip { "cut", by = "peak", output = "leg", to = 0, lasts = "until latch" }
  local run = rig:run { lasts = "5 ms", record = { "peak" }, metrics = {
    { "top", "maximum", of = "coil.current" } } }
  t.equal(run:status(), "done")
  t.near(run:metric "top", 3, 1e-7) -- a picosecond at 22000 A/s
  -- common practice: peak current, on until 3 A: i1 = I + (3 - I) e^(-on/tau), off decays to i0;
  -- each rise of the comparator lies in a period of its own, from the second on
  local r = run:record "peak"
  local rises = {}
  for k = 1, r.n do
    rises[#rises + 1] = r.value[k] == 1 and r.crossed[k] or nil
  end
  t.equal(#rises > 40, true)
  for k = 2, #rises do
    t.equal(math.floor(rises[k] / 1e-4) - math.floor(rises[k - 1] / 1e-4), 1)
  end
end)

t.test("a_comparator_triggers_adcs_and_latches", function()
  local rig = coil()
  rig:comparator { "over", of = "coil.current", above = 8 }
  rig:adc { "peak", of = "coil.current", after = "over", nominal = "1 ms", takes = "2 us" }
  rig:dac { "flag", latch = "over" }
  rig:adc { "clock", of = "coil.current", every = "100 us" }
  rig:loop { "write", law = lw.law.p { kp = 1 }, wanted = 5, measured = "clock",
    output = "flag" }
  local run = rig:run { lasts = "2 ms", record = { "peak", "flag" } }
  local exact = -2e-3 * lw.math.log(1 - 8 / 16)
  t.equal(run:record("peak").n, 1)
  at_or_after(run:record("peak").sample[1], exact)
  t.near(run:record("peak").value[1], 8, 1e-9) -- up to a picosecond late, at 4000 A/s
  t.equal(run:record("flag").n, 1)
  at_or_after(run:record("flag").time[1], exact)
end)

t.test("a_comparator_releases_tasks_and_is_read_by_laws", function()
  local rig = slope()
  rig:dac { "flag" }
  rig:comparator { "high", of = "x.out", above = 1, hysteresis = 2, edge = "both" }
  rig:trip { "turn", by = "high", output = "push", to = -1, lasts = "until clear" }
  rig:core { "mcu", clock = "100 MHz", policy = "fixed priority", urgent = "larger" }
  rig:task { "note", on = "mcu", priority = 1, released_by = "high", takes = "1 ms",
    nominal = "2 s", law = lw.law.own { step = function(edge) return 10 + edge end },
    edge = "high", output = "flag" }
  local r = rig:run { lasts = "8 s", record = { "flag" } }:record "flag"
  t.same_list(r.time, { 1.001, 3.001, 5.001, 7.001 })
  t.same_list(r.value, { 11, 10, 11, 10 })
  t.equal(table.concat(rig:describe { lasts = 1 }, "\n"):find("an edge of the comparator", 1,
    true) ~= nil, true)
end)

t.test("a_stiff_plant_keeps_its_crossings", function()
  local rig = lw.rig "stiff"
  rig:plant { "lag", lw.plant.first_order { gain = 1, time_constant = "1 us" } }
  rig:source { "u", lw.source.step { at = "0.25 s", from = 0, to = 1 } }
  rig:connect { "u", to = "lag.in" }
  rig:adc { "slow", of = "lag.out", every = "1 ms" }
  rig:comparator { "half", of = "lag.out", above = 0.5 }
  local r = edges(rig, "0.3 s", "half")
  t.equal(r.n, 1)
  -- the instant is read as a double of 0.25 s: to 6e-17 s; the stiff method promises 1e-9
  t.near(r.crossed[1] - 0.25, 1e-6 * lw.math.log(2), 1e-9)
end)

t.test("a_comparator_finds_its_crossing_on_a_nonlinear_plant", function()
  local rig = lw.rig "swing"
  rig:plant { "arm", lw.plant.flow { states = { "x", "v" }, start = { 1, 0 },
    flow = function(x, v) return v, -x end } }
  rig:comparator { "positive", of = "arm.x", above = 0, edge = "both" }
  local r = edges(rig, "20 s", "positive")
  t.equal(r.n, 6)
  for k = 1, 6 do
    t.near(r.crossed[k], (k - 0.5) * math.pi, 1e-8) -- rtol of the plant is 1e-8 a step
  end
end)

t.test("a_trigger_during_a_conversion_is_passed_over", function()
  local rig = lw.rig "swing"
  rig:plant { "arm", lw.plant.state_space { A = { { 0, 2 * math.pi }, { -2 * math.pi, 0 } },
    B = { { 0 }, { 0 } }, C = { { 1, 0 } }, start = { 1, 0 } } }
  rig:comparator { "zero", of = "arm.out", above = 0, edge = "both" }
  rig:adc { "slow", of = "arm.out", after = "zero", nominal = "1 s", takes = "0.6 s" }
  -- zeros at 0.25, 0.75, 1.25, ...: every other one is taken
  local r = rig:run { lasts = "3 s", record = { "slow" } }:record "slow"
  t.equal(r.n, 3)
  for k = 1, 3 do
    t.near(r.sample[k], 0.25 + (k - 1), 1e-11)
  end
end)

t.test("observing_a_comparator_changes_nothing", function()
  local function build()
    local rig = slope()
    rig:comparator { "high", of = "x.out", above = 1, hysteresis = 2 }
    return rig:trip { "turn", by = "high", output = "push", to = -1, lasts = "until clear" }
  end
  local function cells(watch)
    local rig, out = build(), {}
    watch.lasts = "10 s"
    local run = rig:run(watch)
    for _, slice in ipairs(rig:slices(watch)) do
      if slice.kind ~= "metric" and slice.name ~= "due for observers" then
        out[#out + 1] = ("%s.%s"):format(slice.owner, slice.name)
      end
    end
    return run:value "x.out", run:value "high", table.concat(out, " ")
  end
  local x, high, names = cells {}
  local x2, high2, names2 = cells { record = { "high", "push", { "x.out", every = "7 ms" } },
    metrics = { { "top", "maximum", of = "x.out" } } }
  t.equal(x2, x)
  t.equal(high2, high)
  t.equal(names2, names)
end)

t.finish()
