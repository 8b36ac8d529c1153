-- Plants written in Lua: parameters by name, kinks found from the very same function, outputs, and
-- what is refused.

local harness = require "harness"
local coil = require "coil"
local lw = require "latewood"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises
local mount, refuses = coil.mount, coil.refuses

-- The plant alone, or driven by a source, at the end of a run.
local function end_of(plant, lasts, signal, source, to)
  local rig = lw.rig "alone"
  rig:plant { "p", plant }
  if source then
    rig:source { "s", source }
    rig:connect { "s", to = to }
  end
  local run = rig:run { lasts = lasts }
  equal(run:status(), "done")
  return run:value(signal)
end

local function test_values()
  test("a_pendulum_keeps_its_energy", function()
    local g, l = 9.81, 0.5
    local plant = lw.plant.flow { states = { "angle", "speed" }, start = { 1, 0 }, rtol = 1e-12,
      outputs = { "speed", { "energy", function(angle, speed)
        return speed * speed / 2 - g / l * lw.math.cos(angle)
      end } },
      flow = function(angle, speed)
        return speed, -g / l * lw.math.sin(angle)
      end }
    harness.same_list(plant:states(), { "angle", "speed" })
    harness.same_list(plant:outputs(), { "speed", "energy" })
    near(end_of(plant, 5, "p.energy"), -g / l * lw.math.cos(1), 1e-10)
  end)

  test("parameters_are_matched_by_name_and_time_is_t", function()
    local plant = lw.plant.flow { states = { "a", "b" }, inputs = { "u" }, rtol = 1e-12,
      flow = function(t, u, b)
        return t, u - b
      end }
    near(end_of(plant, 2, "p.a", lw.source.constant(3), "p.u"), 2, 1e-12)
    near(end_of(plant, 2, "p.b", lw.source.constant(3), "p.u"), 3 * (1 - lw.math.exp(-2)), 1e-10)
  end)

  test("a_linear_plant_in_lua_is_the_linear_plant", function()
    local ready = lw.plant.first_order { gain = 2, time_constant = "3 ms", inputs = { "u" },
      outputs = { "y" } }
    local own = lw.plant.flow { states = { "y" }, inputs = { "u" }, rtol = 1e-11,
      flow = function(y, u)
        return (2 * u - y) / 3e-3
      end }
    local values = {}
    for i, plant in ipairs { ready, own } do
      local rig = lw.rig "loop"
      rig:plant { "p", plant }
      rig:adc { "a", of = "p.y", every = "1 ms" }
      rig:dac { "d", to = "p.u" }
      rig:loop { "l", law = lw.law.pi { kp = 1, ki = 100 }, wanted = 1, measured = "a",
        output = "d", latency = "37 %" }
      values[i] = rig:run { lasts = "50 ms" }:value "p.y"
    end
    near(values[2], values[1], 1e-9)
  end)
end

local function test_kinks()
  -- x' = |sin t| from 0: over n half turns it is 2 n.
  test("kinks_are_found_in_the_flow_itself", function()
    local plant = lw.plant.flow { states = { "x" }, rtol = 1e-10,
      flow = function(t)
        return lw.math.abs(lw.math.sin(t))
      end }
    near(end_of(plant, 3 * lw.math.pi, "p.x"), 6, 1e-9)
  end)

  test("functions_with_kinks_give_their_values", function()
    local m = lw.math
    equal(m.where(1, 2, 3), 2)
    equal(m.where(0, 2, 3), 3)
    equal(m.where(true, 2, 3), 2)
    equal(m.where(false, 2, 3), 3)
    equal(m.clamp(5, -1, 2), 2)
    equal(m.clamp(-5, -1, 2), -1)
    equal(m.clamp(0.5, -1, 2), 0.5)
    equal(m.sign(-3), -1)
    equal(m.sign(0.1), 1)
    equal(m.sign(0), 0)
    equal(m.min(3, 1, 2), 1)
    equal(m.max(3, 1, 2), 3)
    local f = m.table { { 0, 1 }, { 1, 3 }, { 3, 0 } }
    equal(f(-1), 1)
    equal(f(0.5), 2)
    equal(f(1), 3)
    equal(f(2), 1.5)
    equal(f(9), 0)
  end)

  -- x' = table(t): areas under lines; the points are kinks inside the run.
  test("points_of_a_table_are_kinks", function()
    local f = lw.math.table { { 0, 0 }, { 0.37, 1 }, { 1.21, -2 } }
    local plant = lw.plant.flow { states = { "x" }, rtol = 1e-10,
      flow = function(t)
        return f(t)
      end }
    near(end_of(plant, 2, "p.x"), 0.37 / 2 - 0.84 / 2 - 2 * 0.79, 1e-9)
  end)

  test("a_condition_switches_a_flow", function()
    local plant = lw.plant.flow { states = { "x" }, rtol = 1e-10,
      flow = function(x, t)
        return lw.math.where(t > 1.234, -1, 2)
      end }
    near(end_of(plant, 2, "p.x"), 2 * 1.234 - 0.766, 1e-8)
  end)
end

-- A mass that a sine pushes over a rough floor: it rests while the push is below `stick`.
local function rough_floor(stick, slide)
  local m = lw.math
  local function rest_or_turn(place, speed, push, stuck, way)
    if m.abs(push) < stick and stuck == 0 then return place, 0, 1, way end
    return place, speed, stuck, m.sign(push)
  end
  local function break_away(place, speed, push)
    return place, speed, 0, m.sign(push)
  end
  return lw.plant.flow { states = { "place", "speed" }, inputs = { "push" },
    modes = { { "stuck", 1 }, "way" }, rtol = 1e-12,
    flow = function(speed, push, stuck, way)
      return (1 - stuck) * speed, (1 - stuck) * (push - slide * way)
    end,
    events = { { when = function(speed) return speed end,
                 rising = rest_or_turn, falling = rest_or_turn },
               { when = function(push, stuck) return m.abs(push) - stick - (1 - stuck) end,
                 rising = break_away } } }
end

local function test_events()
  -- Down from 5 m at 10 m/s^2: it meets the floor at 1 s with 10 m/s and leaves with 5.
  test("an_end_stop_gives_new_states_and_modes", function()
    local plant = lw.plant.flow { states = { "height", "speed" }, start = { 5, 0 },
      modes = { "bounces" }, rtol = 1e-10,
      outputs = { "height", { "bounced", function(bounces) return bounces end } },
      flow = function(speed) return speed, -10 end,
      events = { { when = function(height) return height end,
        falling = function(height, speed, bounces) return 0, -speed / 2, bounces + 1 end } } }
    near(end_of(plant, 1.5, "p.height"), 2.5 - 1.25, 1e-9)
    equal(end_of(plant, 0.9, "p.bounced"), 0)
    equal(end_of(plant, 1.5, "p.bounced"), 1)
    equal(end_of(plant, 2.2, "p.bounced"), 2)
  end)

  test("dry_friction_sticks_and_breaks_away", function()
    local push = lw.source.sine { amplitude = 0.6, frequency = 10 }
    local far = end_of(rough_floor(0.5, 0.45), 0.0499, "p.place", push, "p.push")
    equal(far > 1e-5, true)
    near(end_of(rough_floor(0.5, 0.45), 0.1, "p.place", push, "p.push"), 0, 1e-10, far)
    near(end_of(rough_floor(0.5, 0.45), 0.15, "p.place", push, "p.push"), far, 1e-10, far)
    equal(end_of(rough_floor(0.7, 0.45), 0.15, "p.place", push, "p.push"), 0) -- never breaks away
  end)

  -- A push that jumps: a held input makes the event true by itself.
  test("a_jump_of_an_input_is_an_event", function()
    local step = lw.source.step { at = 0.05, to = 0.6 }
    near(end_of(rough_floor(0.5, 0.45), 0.15, "p.speed", step, "p.push"), 0.015, 1e-10)
    equal(end_of(rough_floor(0.7, 0.45), 0.15, "p.speed", step, "p.push"), 0)
  end)

  -- The branch is that of the side: within a step the flow is smooth, so few calls do.
  test("a_jump_of_a_flow_costs_few_steps", function()
    local plant = lw.plant.flow { states = { "x" }, rtol = 1e-10, flow = function(t)
      return lw.math.where(lw.math.sin(20 * t), 2, -1)
    end }
    near(end_of(plant, lw.math.pi, "p.x"), lw.math.pi / 2, 1e-9)
  end)
end

local function test_refusals()
  test("bad_events_are_refused", function()
    refuses([[ lw.plant.flow { states = { "x" }, flow = function(x) return x end,
      events = { { rising = function(x) return x end } } } ]],
      "mount.lua:2: plant flow: events[1]: when is missing")
    refuses([[ lw.plant.flow { states = { "x" }, flow = function(x) return x end,
      events = { { when = function(x) return x end, raising = 1 } } } ]],
      "plant flow: events[1]", "\"raising\"")
    refuses([[ lw.plant.flow { states = { "x" }, modes = { "x" }, flow = function(x) return x end } ]],
      "\"x\" is a mode and a state")
    local plant = mount [[
      return lw.plant.flow { states = { "x" }, start = { 1 }, flow = function(x) return -1 end,
        events = { { when = function(x) return x end, falling = function(x) end } } } ]]
    local rig = lw.rig "alone"
    rig:plant { "p", plant }
    local status, message = rig:run { lasts = 2 }:status()
    equal(status, "LW_ERR_LAW")
    equal(message:find("returns nil as after an event, x", 1, true) ~= nil, true)
  end)

  test("what_cannot_be_is_refused_at_its_line", function()
    refuses([[ lw.plant.flow { states = { "x" } } ]], "mount.lua:2: plant flow: flow is missing")
    refuses([[ lw.plant.flow { states = { "angle" }, flow = function(angel) return 1 end } ]],
      "mount.lua:2: plant flow: flow: its parameter \"angel\" is no state", "nearest \"angle\"")
    refuses([[ lw.plant.flow { states = { "x", "v" }, flow = function(x, v) return v end } ]],
      "mount.lua:2: plant flow: flow returns 1 values; one derivative a state is wanted, 2")
    refuses([[ lw.plant.flow { states = { "x" }, inputs = { "u" },
      flow = function(x) return x end } ]], "inputs: no function takes \"u\"")
    refuses([[ lw.plant.flow { states = { "x" }, flow = function(x) return y.z end } ]],
      "plant flow: flow, called at the start with its inputs at 0: mount.lua:2:")
    refuses([[ local n = 0
      lw.plant.flow { states = { "x" }, flow = function(x) n = n + 1 return x end } ]],
      "mount.lua:3: plant flow: flow assigns the upvalue \"n\"")
    refuses([[ lw.plant.flow { states = { "x" }, outputs = { "y" },
      flow = function(x) return x end } ]], "outputs[1]: no state \"y\"")
    refuses([[ lw.plant.flow { states = { "x" }, rtol = 1, flow = function(x) return x end } ]],
      "plant flow: rtol is 1; permitted 1e-13 to 0.1")
    refuses([[ lw.plant.flow { states = { "t" }, flow = function(t) return t end } ]],
      "the name t stands for time")
    refuses([[ lw.plant.flow { states = { "x" }, start = { 1, 2 },
      flow = function(x) return x end } ]], "start has 2 numbers; the plant has 1 states")
    refuses([[ local p = lw.plant.flow { states = { "x" }, flow = function(x) return -x end }
      lw.plant.connect { parts = { { "a", p } }, links = {}, inputs = {}, outputs = {
        { "y", "a.x" } } } ]], "part \"a\": the plant is a flow and has no matrices")
  end)

  test("a_failing_flow_ends_the_run_with_line_and_instant", function()
    local plant = mount [[
      return lw.plant.flow { states = { "x" }, flow = function(x, t)
        if t > 0.5 then error "the tube is off" end
        return -x
      end } ]]
    local rig = lw.rig "alone"
    rig:plant { "p", plant }
    local run = rig:run { lasts = 1 }
    local status, message = run:status()
    equal(status, "LW_ERR_LAW")
    equal(message:find("mount.lua:3: the tube is off", 1, true) ~= nil, true)
    equal(message:find("at 0.5", 1, true) ~= nil or message:find("at 0.49", 1, true) ~= nil, true)
  end)

  test("a_flow_may_not_change_what_it_captures", function()
    local seen = { 0 }
    local plant = lw.plant.flow { states = { "x" }, flow = function(x)
      seen[1] = x
      return -x
    end, start = { 1 } }
    local rig = lw.rig "alone"
    rig:plant { "p", plant }
    raises(function() rig:run { lasts = 1 } end, "seen[1] changed during the run")
  end)
end

local function suite()
  test_values()
  test_kinks()
  test_events()
  test_refusals()
end

harness.run_under_all_collectors(suite)
harness.finish()
