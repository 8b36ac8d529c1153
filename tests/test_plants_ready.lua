-- Further ready plants against closed forms, equilibria and what they conserve.

local lw = require "latewood"
local harness = require "harness"
local test, near, raises = harness.test, harness.near, harness.raises
local m = lw.math

-- A plant named "p" with constant inputs, at the end of a run.
local function final(plant, inputs, lasts, signals)
  local rig = lw.rig "one"
  rig:plant { "p", plant }
  for name, value in pairs(inputs) do
    rig:source { "in " .. name, lw.source.constant(value) }
    rig:connect { "in " .. name, to = "p." .. name }
  end
  local run = rig:run { lasts = lasts }
  assert(run:status() == "done", select(2, run:status()))
  local values = {}
  for i, signal in ipairs(signals) do values[i] = run:value("p." .. signal) end
  return table.unpack(values)
end

-- ---- filters and heat

test("a_filter_rests_at_the_divider_of_its_resistances", function()
  local i, v = final(lw.plant.lc_filter { inductance = "1 mH", capacitance = "10 uF",
    coil_resistance = 0.5, capacitor_resistance = 0.02, load_resistance = 9.5 },
    { voltage = 20, load_current = 0 }, "100 ms", { "current", "out" })
  near(i, 2, 1e-9)
  near(v, 19, 1e-9)
end)

test("a_filter_without_losses_rings_at_its_resonance", function()
  -- v = E (1 - cos(t / sqrt(L C)))
  local l, c, t = 1e-3, 10e-6, 3.7e-3
  local v = final(lw.plant.lc_filter { inductance = l, capacitance = c },
    { voltage = 1, load_current = 0 }, t, { "out" })
  near(v, 1 - m.cos(t / m.sqrt(l * c)), 1e-9)
end)

test("heat_rises_by_power_times_resistance", function()
  local t = final(lw.plant.thermal_lag { resistance = 2, capacity = 5 }, { power = 3, ambient = 20 },
    10, { "temperature" })
  near(t, 20 * (1 - m.exp(-1)) + 6 * (1 - m.exp(-1)), 1e-9)
  local first, last = final(lw.plant.thermal_lag { resistance = 2, capacity = 5, stages = 4 },
    { power = 3, ambient = 20 }, 1000, { "temperature1", "temperature4" })
  near(first, 26, 1e-9)
  near(last, 21.5, 1e-9) -- across a quarter of the resistance
end)

-- ---- converters: equilibria of the averaged circuits (common practice, no source)

test("a_buck_gives_the_share_of_its_supply", function()
  local i, v = final(lw.plant.buck { inductance = "100 uH", capacitance = "100 uF",
    resistance = 0.1, load_resistance = 4.9 }, { duty = 0.4, supply = 24, load_current = 0 },
    "50 ms", { "current", "voltage" })
  near(v, 0.4 * 24 * 4.9 / 5, 1e-6)
  near(i, v / 4.9, 1e-6)
end)

test("a_buck_with_a_load_of_constant_power_balances_it", function()
  local i, v = final(lw.plant.buck { inductance = "100 uH", capacitance = "1 mF", resistance = 0.1,
    load_resistance = 3, load_power = 10, start = { 5, 9 } },
    { duty = 0.5, supply = 24, load_current = 0 }, "200 ms", { "current", "voltage" })
  near(i * v, v * v / 3 + 10, 1e-5)
  near(v, 12 - 0.1 * i, 1e-6)
end)

test("a_boost_gives_its_supply_over_what_the_duty_leaves", function()
  local v = final(lw.plant.boost { inductance = "100 uH", capacitance = "100 uF",
    load_resistance = 20 }, { duty = 0.6, supply = 12, load_current = 0 }, "200 ms", { "voltage" })
  near(v, 30, 1e-5)
end)

test("a_duty_counts_within_0_and_1", function()
  local v = final(lw.plant.buck { inductance = "100 uH", capacitance = "100 uF", load_resistance = 5 },
    { duty = 1.5, supply = 24, load_current = 0 }, "50 ms", { "voltage" })
  near(v, 24, 1e-6)
end)

-- ---- the machine

test("a_machine_balances_torque_and_power", function()
  local p = { resistance = 0.5, d_inductance = "2 mH", q_inductance = "3 mH", flux = 0.05,
    inertia = 2e-4, friction = 1e-3, pole_pairs = 4 }
  local id, iq, speed, torque = final(lw.plant.magnet_machine(p),
    { d_voltage = -2, q_voltage = 10, load_torque = 0.1 }, 2,
    { "d_current", "q_current", "speed", "torque" })
  near(torque, 1.5 * 4 * (0.05 * iq + (2e-3 - 3e-3) * id * iq), 1e-12)
  near(torque, 1e-3 * speed + 0.1, 1e-7)
  -- electrical power less copper losses is mechanical power
  near(1.5 * (-2 * id + 10 * iq) - 1.5 * 0.5 * (id * id + iq * iq), torque * speed, 1e-5)
end)

-- ---- the pendulum

-- Period at amplitude a: 2 pi sqrt(J / w) / agm(1, cos(a / 2)) (Gauss; arithmetic-geometric mean).
local function period(a, inertia, weight)
  local x, y = 1, m.cos(a / 2)
  for _ = 1, 40 do x, y = (x + y) / 2, m.sqrt(x * y) end
  return 2 * math.pi * m.sqrt(inertia / weight) / x
end

test("a_pendulum_has_the_period_of_its_amplitude", function()
  for _, a in ipairs { 0.1, 1, 2, 3 } do
    local t = period(a, 0.02, 1.5)
    local angle, speed = final(lw.plant.pendulum { inertia = 0.02, weight_torque = 1.5,
      start = { a, 0 } }, { torque = 0 }, 3 * t, { "angle", "speed" })
    near(angle, a, 1e-5)
    near(speed, 0, 1e-4, 1)
  end
end)

test("dry_friction_takes_its_share_of_each_swing_and_then_holds", function()
  -- a torsion balance in the small: amplitude falls by 2 dry / weight a half swing
  local weight, dry = 1.5, 0.003
  local half = math.pi * m.sqrt(0.02 / weight)
  local plant = lw.plant.pendulum { inertia = 0.02, weight_torque = weight, dry = dry,
    start = { 0.02, 0 } }
  near(final(plant, { torque = 0 }, half, { "angle" }), -(0.02 - 2 * dry / weight), 5e-5) -- sine: a^2 / 16
  local angle, speed = final(plant, { torque = 0 }, 50 * half, { "angle", "speed" })
  near(speed, 0, 0, 1)
  assert(m.abs(angle) <= dry / weight, "held within the band that friction holds")
  near(final(plant, { torque = 0 }, 80 * half, { "angle" }), angle, 1e-9, 1) -- other windows of its steps
end)

test("friction_holds_until_the_torque_exceeds_the_breakaway", function()
  local plant = lw.plant.pendulum { inertia = 0.02, weight_torque = 0, dry = 0.1, breakaway = 0.15 }
  near(final(plant, { torque = 0.149 }, 1, { "angle" }), 0, 0, 1)
  -- past it: (torque - dry) / J
  near(final(plant, { torque = 0.2 }, 1, { "angle" }), 0.5 * 0.1 / 0.02, 1e-6)
end)

-- ---- the tank

test("a_tank_drains_by_torricellis_law_and_stays_empty", function()
  local a, o, h = 0.5, 1e-3, 2
  local k = o * m.sqrt(2 * 9.80665) / a
  local plant = lw.plant.tank { area = a, outlet_area = o, start = { h } }
  for _, t in ipairs { 10, 100, 300 } do
    near(final(plant, { inflow = 0 }, t, { "level" }), (m.sqrt(h) - k * t / 2) ^ 2, 1e-6)
  end
  near(final(plant, { inflow = 0 }, 2 * m.sqrt(h) / k + 50, { "level" }), 0, 1e-9, 1)
  local level, out = final(plant, { inflow = 0.004 }, 20000, { "level", "outflow" })
  near(out, 0.004, 1e-8)
  near(level, (0.004 / o) ^ 2 / (2 * 9.80665), 1e-6)
end)

-- ---- bad values

test("bad_values_are_named_with_their_range", function()
  raises(function() lw.plant.lc_filter { inductance = -1, capacitance = 1 } end,
    "inductance is -1; permitted above 0")
  raises(function() lw.plant.thermal_lag { resistance = 1, capacity = 1, stages = 40 } end,
    "stages is 40; permitted 1 to 32")
  raises(function() lw.plant.magnet_machine { resistance = 1, d_inductance = 1, q_inductance = 1,
    flux = 1, inertia = 1, pole_pairs = 0 } end, "pole_pairs is 0; permitted 1 to 100")
  raises(function() lw.plant.pendulum { inertia = 1, weight_torque = 1, dry = 2, breakaway = 1 } end,
    "breakaway is 1; at least the dry friction is wanted")
  raises(function() lw.plant.tank { area = "2 m", outlet_area = 1 } end, "area")
  raises(function() lw.plant.boost { inductance = 1, capacitance = 1, load_resistance = 0 } end,
    "load_resistance is 0; permitted above 0")
end)

harness.finish()
