-- Plants that are linear between switchings, in rigs: converters, end stops, relays.

local lw = require "latewood"
local t = require "harness"

local G = 9.81

-- A mass that falls on a floor, with and without a stop above.
local function falling(restitution, more)
  local p = { lw.plant.state_space { states = { "height", "speed" }, inputs = { "acceleration" },
    outputs = { "height out" }, A = { { 0, 1 }, { 0, 0 } }, B = { { 0 }, { 1 } },
    C = { { 1, 0 } }, start = { 1, 0 } }, position = "height", velocity = "speed", low = 0,
    restitution = restitution, rest_below = restitution > 0 and 0.1 or 0 }
  for k, v in pairs(more or {}) do
    p[k] = v
  end
  local rig = lw.rig "fall"
  rig:plant { "mass", lw.plant.end_stop(p) }
  return rig
end

t.test("a_mass_bounces_at_real_instants_and_comes_to_rest", function()
  local rig = falling(0.8)
  rig:source { "gravity", lw.source.constant(-G) }
  rig:connect { "gravity", to = "mass.acceleration" }
  rig:comparator { "high", of = "mass.height", above = 0.5, edge = "both" }
  local run = rig:run { lasts = "5 s", record = { "high" }, metrics = {
    { "second top", "maximum", of = "mass.height", from = "0.5 s" },
    { "fastest", "minimum", of = "mass.speed" }, { "lowest", "minimum", of = "mass.height" },
    { "first rebound", "maximum", of = "mass.speed" } } }
  t.equal(run:status(), "done")
  -- common practice: tops shrink by e^2, speeds by e
  t.near(run:metric "second top", 0.64, 1e-13)
  t.near(run:metric "fastest", -math.sqrt(2 * G), 1e-13)
  t.near(run:metric "first rebound", 0.8 * math.sqrt(2 * G), 1e-13)
  t.near(run:metric "lowest", 0, 1e-14, 1) -- rounding of a height of 1
  t.equal(run:value "mass.height", 0)
  t.equal(run:value "mass.speed", 0)
  -- up through 0.5 after the first impact: v t - g t^2 / 2 = 0.5
  local v, first = 0.8 * math.sqrt(2 * G), math.sqrt(2 / G)
  local up = first + (v - math.sqrt(v * v - G)) / G
  t.near(run:record("high").crossed[2], up, 1e-13)
end)

t.test("a_mass_rests_at_a_stop_until_it_is_pulled_away", function()
  local rig = falling(0, { high = 2 })
  rig:source { "push", lw.source.pulses { low = -1, high = 3, at = "3 s", width = "2 s",
    every = "100 s" } }
  rig:connect { "push", to = "mass.acceleration" }
  local run = rig:run { lasts = "10 s", record = { { "mass.height", every = "0.5 s" } } }
  local h = run:record("mass.height").value
  t.near(h[3], 0.5, 1e-14, 1)         -- at 1 s: 1 - t^2 / 2
  t.equal(h[5], 0)                    -- from sqrt(2) s on at rest
  t.equal(h[7], 0)
  t.near(h[9], 1.5, 1e-13)            -- 3 / 2 t^2 from 3 s on
  t.equal(h[11], 2)                   -- at the upper stop since 3 s + sqrt(4 / 3)
  t.near(h[13], 2 - 0.5, 1e-13)       -- falls again from 5 s on
  t.equal(h[21], 0)
end)

t.test("other_states_go_on_while_a_position_rests", function()
  -- a motor winds up a spring against a load that has reached its stop
  local two = lw.plant.two_mass_drive { resistance = 1, inductance = "1 mH", torque_constant = 0.1,
    motor_inertia = 1e-3, load_inertia = 1e-2, stiffness = 10, damping = 0.05 }
  local rig = lw.rig "stop"
  rig:plant { "drive", lw.plant.end_stop { two, position = "load_angle", velocity = "load_speed",
    low = -1, high = 0.5, restitution = 0 } }
  rig:source { "volts", lw.source.constant(10) }
  rig:connect { "volts", to = "drive.voltage" }
  local run = rig:run { lasts = "5 s", metrics = { { "top", "maximum", of = "drive.load_angle" } } }
  t.equal(run:status(), "done")
  t.equal(run:value "drive.load_angle", 0.5)
  t.equal(run:value "drive.load_speed", 0)
  t.near(run:metric "top", 0.5, 1e-14)
  -- stalled: 10 A times 0.1 N m/A over 10 N m/rad
  t.near(run:value "drive.twist", 0.1, 1e-9)
  t.near(run:value "drive.current", 10, 1e-9)
end)

local function buck(duty, more)
  local rig = lw.rig "converter"
  local p = { inductance = "10 uH", capacitance = "4.7 mF", load_resistance = 50 }
  for k, v in pairs(more or {}) do
    p[k] = v
  end
  rig:plant { "buck", lw.plant.buck_switched(p) }
  rig:source { "supply", lw.source.constant(48) }
  rig:source { "gate", lw.source.pulses { high = 1, width = duty * 10e-6, every = "10 us" } }
  rig:connect { "supply", to = "buck.supply" }
  return rig:connect { "gate", to = "buck.gate" }
end

t.test("a_buck_settles_at_the_ratio_of_discontinuous_conduction", function()
  -- common practice: M = 2 / (1 + sqrt(1 + 8 L / (R T D^2)))
  local d = 0.3
  local m = 2 / (1 + math.sqrt(1 + 8 * 10e-6 / (50 * 10e-6 * d * d)))
  local rig = buck(d, { start = { 0, 48 * m } })
  local run = rig:run { lasts = "200 ms", metrics = {
    { "mean", "mean", of = "buck.voltage", from = "199 ms" },
    { "peak", "maximum", of = "buck.current", from = "199 ms" },
    { "lowest", "minimum", of = "buck.current" } } }
  -- the formula neglects the ripple, here 0.3 mV / 36 V: 1e-5
  t.near(run:metric "mean", 48 * m, 1e-5)
  t.near(run:metric "peak", 48 * (1 - m) / 10e-6 * d * 10e-6, 1e-4)
  t.near(run:metric "lowest", 0, 1e-13, 9) -- rounding of 9 A
end)

t.test("a_boost_settles_at_the_ratio_of_discontinuous_conduction", function()
  -- common practice: M = (1 + sqrt(1 + 2 D^2 R T / L)) / 2
  local d, r, l, period = 0.4, 200, 10e-6, 10e-6
  local m = (1 + math.sqrt(1 + 2 * d * d * r * period / l)) / 2
  local rig = lw.rig "converter"
  rig:plant { "boost", lw.plant.boost_switched { inductance = l, capacitance = "1 mF",
    load_resistance = r, start = { 0, 12 * m } } }
  rig:source { "supply", lw.source.constant(12) }
  rig:source { "gate", lw.source.pulses { high = 1, width = d * period, every = period } }
  rig:connect { "supply", to = "boost.supply" }
  rig:connect { "gate", to = "boost.gate" }
  local run = rig:run { lasts = "500 ms", metrics = {
    { "mean", "mean", of = "boost.voltage", from = "499 ms" },
    { "peak", "maximum", of = "boost.current", from = "499 ms" } } }
  t.near(run:metric "mean", 12 * m, 1e-4) -- ripple is 1e-4 of it
  t.near(run:metric "peak", 12 / l * d * period, 1e-12)
end)

t.test("continuous_conduction_is_duty_times_supply", function()
  local rig = buck(0.25, { load_resistance = 0.5, start = { 24, 12 } })
  local run = rig:run { lasts = "50 ms", metrics = { { "mean", "mean", of = "buck.voltage",
    from = "40 ms" }, { "mode", "maximum", of = "buck.mode", from = "40 ms" },
    { "open", "minimum", of = "buck.mode", from = "40 ms" } } }
  t.near(run:metric "mean", 12, 1e-4)
  t.equal(run:metric "mode", 3) -- diode
  t.equal(run:metric "open", 2) -- on; never open
end)

t.test("a_loop_and_a_comparator_work_on_a_plant_with_modes", function()
  -- peak-current limit of the winding by a comparator that opens the gate
  local rig = lw.rig "limited"
  rig:plant { "buck", lw.plant.buck_switched { inductance = "100 uH", capacitance = "100 uF",
    load_resistance = 2 } }
  rig:source { "supply", lw.source.constant(24) }
  rig:connect { "supply", to = "buck.supply" }
  rig:dac { "gate", to = "buck.gate", latch = "20 us", start = 1 }
  rig:comparator { "peak", of = "buck.current", above = 4 }
  rig:trip { "off", by = "peak", output = "gate", to = 0, lasts = "until latch" }
  local run = rig:run { lasts = "5 ms", record = { "peak" }, metrics = {
    { "peak", "maximum", of = "buck.current" } } }
  t.equal(run:status(), "done")
  t.near(run:metric "peak", 4, 1e-6) -- a picosecond at 240000 A/s
  t.equal(run:record("peak").n > 100, true)
end)

t.test("two_plants_with_modes_in_one_group_are_the_product_of_their_modes", function()
  -- two relays, each about its own lag, the second driven by the first's output
  local function relay(up)
    return lw.plant.modes { states = { "x" }, inputs = { "in" }, outputs = { "x out" },
      modes = {
        { "up", A = { { -1 } }, B = { { 1 } }, constant = { up }, C = { { 1 } } },
        { "down", A = { { -1 } }, B = { { 1 } }, constant = { -up }, C = { { 1 } } } },
      switchings = { { from = "up", to = "down", when = { x = 1, above = 0.5 } },
        { from = "down", to = "up", when = { x = 1, below = -0.5 } } } }
  end
  local function run(both)
    local rig = lw.rig "relays"
    rig:plant { "a", relay(3) }
    rig:comparator { "top", of = "a.x", above = 0, edge = "both" }
    if both then
      rig:plant { "b", relay(7) }
      rig:connect { "a.x out", to = "b.in" }
    end
    return rig:run { lasts = "20 s", record = { "top" } }, rig
  end
  local alone = run(false):record "top"
  local with, rig = run(true)
  t.equal(with:status(), "done")
  local joined = with:record "top"
  t.equal(joined.n, alone.n)
  for k = 1, alone.n do
    t.near(joined.crossed[k], alone.crossed[k], 1e-12)
  end
  -- common practice: half a period is tau ln((k + h) / (k - h))
  t.near(alone.crossed[4] - alone.crossed[2], 2 * lw.math.log(3.5 / 2.5), 1e-12)
  t.equal(table.concat(rig:describe { lasts = "1 s" }, "\n"):find("4 modes", 1, true) ~= nil, true)
end)

t.test("changes_of_two_inputs_at_one_tick_count_together", function()
  local plant = lw.plant.modes { states = { "n" }, inputs = { "a", "b" },
    modes = { { "rest", A = { { 0 } } }, { "seen", A = { { 0 } } } },
    switchings = { { from = "rest", to = "seen", when = { a = 1, b = 1, below = 0.5 },
      sets = { n = { n = 1, offset = 1 } } } } }
  local rig = lw.rig "pair"
  rig:plant { "p", plant }
  rig:source { "one", lw.source.step { at = "1 s", from = 1, to = 0 } }
  rig:source { "two", lw.source.step { at = "1 s", from = 0, to = 1 } }
  rig:connect { "one", to = "p.a" }
  rig:connect { "two", to = "p.b" }
  t.equal(rig:run { lasts = "2 s" }:value "p.n", 0)
end)

t.test("a_sine_drives_a_rectifier_to_its_extinction_angle", function()
  local r, l, w = 2, 10e-3, 2 * math.pi * 50
  local plant = lw.plant.modes { states = { "current" }, inputs = { "mains" },
    modes = { { "blocks", A = { { 0 } } }, { "conducts", A = { { -r / l } }, B = { { 1 / l } } } },
    switchings = { { from = "blocks", to = "conducts", when = { mains = 1, above = 0 } },
      { from = "conducts", to = "blocks", when = { current = 1, below = 0 },
        sets = { current = 0 } } } }
  local rig = lw.rig "rectifier"
  rig:plant { "diode", plant }
  rig:source { "mains", lw.source.sine { amplitude = 325, frequency = "50 Hz" } }
  rig:connect { "mains", to = "diode.mains" }
  rig:comparator { "flows", of = "diode.current", above = 1e-9, edge = "both" }
  local run = rig:run { lasts = "0.1 s", record = { "flows" } }
  -- common practice: sin(b - p) + sin(p) exp(-b / tan(p)) = 0
  local phi, lo, hi = math.atan(w * l / r), math.pi, 2 * math.pi
  for _ = 1, 100 do
    local b = (lo + hi) / 2
    if math.sin(b - phi) + math.sin(phi) * math.exp(-b / math.tan(phi)) > 0 then
      lo = b
    else
      hi = b
    end
  end
  local c = run:record("flows").crossed
  for k = 1, 5 do
    -- the comparator's 1 nA is 1e-14 s early at 1e5 A/s
    t.near(c[2 * k], (lo + 2 * math.pi * (k - 1)) / w, 1e-12, 0.1)
  end
end)

t.test("chatter_between_modes_is_a_status_with_its_instant", function()
  local plant = lw.plant.modes { states = { "x" }, start = { 0.75 },
    modes = { { "down", A = { { 0 } }, constant = { -1 } }, { "up", A = { { 0 } }, constant = { 1 } } },
    switchings = { { from = "down", to = "up", when = { x = 1, below = 0 } },
      { from = "up", to = "down", when = { x = 1, above = 0 } } } }
  local rig = lw.rig "slide"
  rig:plant { "p", plant }
  local run = rig:run { lasts = "2 s" }
  local status, message = run:status()
  t.equal(status, "LW_ERR_CHATTER")
  t.equal(message:find("at 0.75 s", 1, true) ~= nil, true)
end)

t.test("observing_changes_nothing", function()
  local function state(watch)
    watch.lasts = "3 ms"
    local run = buck(0.3, { start = { 0, 5 } }):run(watch)
    return ("%a %a"):format(run:value "buck.current", run:value "buck.voltage")
  end
  t.equal(state { record = { { "buck.current", every = "0.37 us" } },
    metrics = { { "top", "maximum", of = "buck.voltage" } } }, state {})
end)

t.test("what_cannot_be_is_said_by_name", function()
  local one = { { "a", A = { { 0 } } } }
  t.raises(function() lw.plant.modes { states = { "x" } } end, "modes is missing")
  t.raises(function() lw.plant.modes { states = { "x" }, modes = { { "a", A = { { 0, 1 } } } } } end,
    "modes[1]: A is 1 x 2; 1 x 1 is wanted")
  t.raises(function() lw.plant.modes { states = { "x" }, modes = one,
    switchings = { { to = "b", when = { x = 1, above = 0 } } } } end,
    'switching 1: to: no mode "b"; nearest "a"')
  t.raises(function() lw.plant.modes { states = { "x" }, modes = one,
    switchings = { { to = "a", when = { y = 1, above = 0 } } } } end, "switchings[1]: when", '"y"')
  t.raises(function() lw.plant.modes { states = { "x" }, modes = one,
    switchings = { { to = "a", when = { x = 1 } } } } end, "above or below is missing")
  t.raises(function() lw.plant.modes { states = { "x" }, modes = one,
    switchings = { { to = "a" } } } end, "when is missing")
  t.raises(function() lw.plant.modes { states = { "x" }, modes = { { "a", A = { { 0 } } },
    { "a", A = { { 0 } } } } } end, 'mode "a" is stated twice')
  t.raises(function() lw.plant.buck_switched { inductance = 0, capacitance = 1 } end,
    "inductance is 0; permitted above 0")
  local mass = lw.plant.state_space { states = { "x", "v" }, A = { { 0, 1 }, { 0, 0 } },
    B = { { 0 }, { 1 } }, C = { { 1, 0 } } }
  t.raises(function() lw.plant.end_stop { mass, position = "x", velocity = "v", high = 1,
    restitution = 0.5 } end, "rest_below is 0")
  t.raises(function() lw.plant.end_stop { mass, position = "y", velocity = "v", high = 1 } end,
    'position: no state "y"')
  t.raises(function() lw.plant.end_stop { mass, position = "x", velocity = "v", high = -1 } end,
    "start of the position is 0")
  t.raises(function() lw.plant.series(lw.plant.modes { states = { "x" }, inputs = { "in" },
    modes = one }, mass) end, "the plant has modes")
  local rig = lw.rig "mixed"
  rig:plant { "a", lw.plant.modes { states = { "x" }, modes = one } }
  rig:plant { "b", lw.plant.flow { states = { "y" }, inputs = { "u" },
    flow = function(y, u) return u - y end } }
  rig:connect { "a.x", to = "b.u" }
  t.raises(function() rig:run { lasts = 1 } end,
    'plant "b": a flow cannot be connected to a plant with modes')
end)

t.finish()
