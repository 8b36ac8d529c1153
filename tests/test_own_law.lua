-- Control laws and sources written in Lua: what they are given, what they return, and what they may
-- not do.

local harness = require "harness"
local coil = require "coil"
local lw = require "latewood"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises
local mount, refuses = coil.mount, coil.refuses

local function test_own_laws()
  test("parameters_are_inputs_states_and_time_by_name", function()
    local law = lw.law.own { state = { b = 1, a = 2 }, outputs = { "u", "v" },
      step = function(a, wanted, dt, b, feed, now, period, job, missed)
        return wanted + feed, dt + now + period + job + missed, a, b
      end }
    harness.same_list(law:inputs(), { "wanted", "feed" })
    harness.same_list(law:states(), { "a", "b" })
    harness.same_list(law:outputs(), { "u", "v" })
  end)

  test("a_law_in_lua_gives_the_bits_of_the_ready_one", function()
    local ready = lw.law.pi { kp = 1.5, ki = 2500, limit = { -6, 6 }, start = 0.5 }
    local options = { inductance = 2e-4, period = "100 us", latch = "100 us", wanted = 2,
      latency = "30 us", lasts = "20 ms" }
    options.law = ready
    local one = coil.run(options):record "current"
    options.law = mount(coil.own_pi)
    local other = coil.run(options):record "current"
    equal(one.n, other.n)
    equal(one.n > 150, true)
    for i = 1, one.n do
      -- ki T is formed by the ready law and is a constant here: one rounding apart a step
      near(other.value[i], one.value[i], 1e-12, 1)
    end
  end)

  test("states_return_in_the_order_of_the_parameters", function()
    local law = lw.law.own { state = { second = 10, first = 1 },
      step = function(wanted, first, measured, second)
        return first + second + 0 * (wanted + measured), first + 1, second + 100
      end }
    local run = coil.run { inductance = 1, period = "100 us", law = law, wanted = 0 }
    local steps = run:record "control"
    for k = 1, steps.n do
      equal(steps.out[k], 11 + 101 * (k - 1))
      equal(steps.first[k], 1 + k)
      equal(steps.second[k], 10 + 100 * k)
    end
  end)

  test("time_is_given_in_seconds_and_samples", function()
    local law = lw.law.own { outputs = { "a", "b", "c", "d", "e" },
      step = function(wanted, measured, dt, now, period, job, missed)
        return dt + 0 * (wanted + measured), now, period, job, missed
      end }
    local steps = coil.run { inductance = 1, period = "100 us", law = law, wanted = 0 }
      :record "control"
    for k = 1, steps.n do
      near(steps.a[k], 1e-4, 1e-12)
      near(steps.b[k], (k - 1) * 1e-4, 1e-12)
      near(steps.c[k], 1e-4, 1e-12)
      equal(steps.d[k], k - 1)
      equal(steps.e[k], 0)
    end
  end)

  test("a_list_is_one_table_changed_in_place", function()
    local law = lw.law.own { state = { z = { 1, 2, 3 }, n = 0 },
      step = function(wanted, measured, z, n)
        z[1], z[2], z[3] = z[2], z[3], z[1]
        return z[1] + 0 * (wanted + measured), n + 1
      end }
    harness.same_list(law:states(), { "z[1]", "z[2]", "z[3]", "n" })
    local options = { inductance = 1, period = "100 us", law = law, wanted = 0 }
    local wanted = { 2, 3, 1 }
    for _ = 1, 2 do -- a second run begins anew
      local steps = coil.run(options):record "control"
      for k = 1, steps.n do
        equal(steps.out[k], wanted[(k - 1) % 3 + 1])
        equal(steps.n ~= nil, true)
        equal(steps["z[1]"][k], wanted[(k - 1) % 3 + 1])
      end
    end
  end)

  test("an_integer_state_arrives_as_an_integer", function()
    local law = lw.law.own { state = { i = lw.int(7) },
      step = function(wanted, measured, i)
        return (math.type(i) == "integer" and 1 or 0) + 0 * (wanted + measured), i // 2 + 4
      end }
    local steps = coil.run { inductance = 1, period = "100 us", law = law, wanted = 0 }
      :record "control"
    equal(steps.out[1], 1)
    equal(steps.i[1], 7)
    local halved = lw.law.own { state = { i = lw.int(7) },
      step = function(wanted, i) return wanted, i / 2 end }
    local rig = lw.rig "r"
    rig:source { "x", lw.source.constant(1) }:adc { "seen", of = "x", every = "1 ms" }
    rig:value { "v" }:loop { "control", law = halved, wanted = "seen", output = "v" }
    local status, message = rig:run { lasts = "5 ms" }:status()
    equal(status, "LW_ERR_LAW")
    equal(message:find("returns 3.5 as i; a whole number is wanted", 1, true) ~= nil, true)
  end)

  test("assigning_an_upvalue_is_refused_with_its_line", function()
    refuses([[local total = 0
lw.law.own { step = function(wanted, measured)
  local e = wanted - measured
  total = total + e
  return total
end }]], 'mount.lua:5: law own: step assigns the upvalue "total"')
  end)

  test("assigning_a_global_is_refused_with_its_line", function()
    refuses([[lw.law.own { step = function(wanted)

  memory = wanted
  return wanted
end }]], 'mount.lua:4: law own: step assigns the global "memory"')
    refuses([[lw.law.own { step = function(wanted)
  _G.memory = wanted
  return wanted
end }]], 'mount.lua:3: law own: step assigns the global "memory"')
    refuses([[lw.law.own { step = function(wanted)
  local e = _ENV
  e["a name that is too long to be kept as a short one"] = wanted
  return wanted
end }]], 'mount.lua:4: law own: step assigns the global')
  end)

  test("assignments_in_nested_functions_are_found", function()
    refuses([[local total = 0
lw.law.own { step = function(wanted)
  local function deeper()
    return function()
      total = wanted
    end
  end
  deeper()()
  return wanted
end }]], 'mount.lua:6: law own: step assigns the upvalue "total"')
    refuses([[lw.law.own { step = function(wanted)
  (function() (function() leak = 1 end)() end)()
  return wanted
end }]], 'mount.lua:3: law own: step assigns the global "leak"')
  end)

  test("assignments_in_captured_functions_are_found", function()
    refuses([[local calls = 0
local function helper(x)
  calls = calls + 1
  return x
end
lw.law.own { step = function(wanted) return helper(wanted) end }]],
      'mount.lua:4: law own: step captures a function that assigns the upvalue "calls"')
  end)

  test("locals_of_the_step_may_be_assigned_by_its_own_closures", function()
    local law = mount [[return lw.law.own { step = function(wanted)
      local sum = 0
      local function add(x) sum = sum + x end
      for _ = 1, 3 do add(wanted) end
      local t = { n = 1 }
      t.n = sum
      local _ENV = {}
      scratch = t.n
      return scratch
    end }]]
    harness.same_list(law:inputs(), { "wanted" })
  end)

  test("the_line_is_right_far_down_a_long_function", function()
    local body = {}
    for i = 1, 600 do body[i] = "local a" .. i % 100 .. " = wanted * " .. i + 0.5 end
    -- blocks keep the number of locals low; blank lines make absolute line marks
    local text = "local kept = 0\nlw.law.own { step = function(wanted)\n" ..
      "do " .. table.concat(body, " end\ndo ") .. " end\n" .. ("\n"):rep(300) ..
      "kept = wanted\nreturn wanted end }"
    refuses(text, "mount.lua:" .. 3 + 600 + 300 + 1 .. ": law own: step assigns the upvalue")
  end)

  test("more_than_255_constants_do_not_hide_a_global", function()
    local body = {}
    for i = 1, 300 do body[i] = ("t[%d] = %d.25"):format(i % 7 + 1, i) end
    refuses("lw.law.own { step = function(wanted)\nlocal t = {}\n" .. table.concat(body, "\n") ..
      "\nhidden = t[1]\nreturn wanted end }",
      "mount.lua:304: law own: step assigns the global")
  end)

  test("a_changed_captured_table_is_named_after_the_run", function()
    local options = { inductance = 1, period = "100 us", wanted = 0 }
    options.law = mount [[
      local gains = { kp = 1, inner = { list = {} } }
      return lw.law.own { step = function(wanted, measured)
        gains.inner.list[1] = wanted
        return measured
      end }]]
    raises(function() coil.run(options) end, "the captured table element gains.inner.list[1]",
      "changed during the run")
    options.law = mount [[
      local seen = {}
      return lw.law.own { step = function(wanted, measured)
        seen[#seen + 1] = measured
        return wanted
      end }]]
    raises(function() coil.run(options) end, "seen[")
    options.law = mount [[
      local seen = { 1, 2, 3 }
      return lw.law.own { step = function(wanted, measured)
        seen[#seen] = nil
        return wanted + measured
      end }]]
    raises(function() coil.run(options) end, "seen[")
  end)

  test("a_changed_global_table_is_named_after_the_run", function()
    local environment = { memory = { n = 0 } }
    local step = assert(load("return function(wanted, measured) memory.n = memory.n + 1 " ..
      "return wanted + measured end", "=mount.lua", "t", environment))()
    raises(function()
      coil.run { inductance = 1, period = "100 us", wanted = 0, law = lw.law.own { step = step } }
    end, "the captured table element memory.n")
  end)

  test("captured_tables_that_stay_as_they_are_may_be_cyclic_and_hold_anything", function()
    local law = mount [[
      local gains = { kp = 2, nan = 0/0, [0.5] = true, f = function(x) return x end }
      gains.self = gains
      gains.f = function(x) return gains.kp * x end
      local nothing
      return lw.law.own { step = function(wanted, measured)
        if nothing then return 0 end
        return gains.f(wanted - measured)
      end }]]
    local run = coil.run { inductance = 1, period = "100 us", wanted = 0, law = law }
    equal(run:status(), "done")
  end)

  test("a_list_that_grows_is_refused_after_the_run", function()
    local law = mount [[return lw.law.own { state = { z = { 0 } },
      step = function(wanted, z)
        z.hidden = wanted
        return z[1]
      end }]]
    local rig = lw.rig "r"
    rig:source { "x", lw.source.constant(1) }:adc { "seen", of = "x", every = "1 ms" }
    rig:value { "v" }:loop { "control", law = law, wanted = "seen", output = "v" }
    raises(function() rig:run { lasts = "5 ms" } end, "mount.lua:3: state z holds more than its 1")
  end)

  -- The run of a law that fails in its step: status, message.
  local function failing(text)
    local law = mount(text)
    local run = coil.run { inductance = 1, period = "100 us", wanted = 1, law = law }
    return run:status()
  end

  local function fails_with(text, ...)
    local status, message = failing(text)
    equal(status, "LW_ERR_LAW")
    for _, wanted in ipairs { ... } do
      if not message:find(wanted, 1, true) then
        error(("message %q lacks %q"):format(message, wanted), 2)
      end
    end
  end

  test("an_error_in_a_step_ends_the_run_with_its_line_and_instant", function()
    fails_with([[return lw.law.own { step = function(wanted, measured, job)
      if job == 3 then
        return wanted + nil
      end
      return measured
    end }]], "mount.lua:4: attempt to perform arithmetic on a nil value", "control", "0.0003")
    fails_with([[return lw.law.own { step = function(wanted, measured)
      error({ code = wanted + measured })
    end }]], "a table in place of a message")
  end)

  test("what_a_step_returns_is_checked", function()
    fails_with([[return lw.law.own { step = function(wanted, measured)
      return nil
    end }]], "mount.lua:2: returns nil as out; a number is wanted")
    fails_with([[return lw.law.own { state = { s = 0 }, step = function(wanted, measured, s)
      return wanted
    end }]], "mount.lua:2: returns nil as s; a number is wanted")
    fails_with([[return lw.law.own { step = function(wanted, measured) return "1" end }]],
      "returns a string as out")
    fails_with([[return lw.law.own { state = { z = { 1, 2 } }, step = function(wanted, measured, z)
      z[2] = nil
      return wanted
    end }]], "element 2 is nil after the step")
  end)

  test("a_law_that_yields_or_recurses_without_end_fails_cleanly", function()
    fails_with([[return lw.law.own { step = function(wanted, measured)
      return coroutine.yield(wanted + measured)
    end }]], "yield")
    -- A finalizer that Lua happens to call on a full stack fails, and what it owns is lost: leave
    -- none to call.
    harness.collect()
    fails_with([[local function again(x) return 1 + again(x) end
      return lw.law.own { step = function(wanted, measured) return again(wanted + measured) end }]],
      "overflow")
  end)

  test("a_law_may_not_run_the_rig_that_calls_it", function()
    local box = {}
    local law = lw.law.own { step = function(wanted, measured)
      box.run:advance(1)
      return wanted + measured
    end }
    local rig = coil.loop { inductance = 1, period = "100 us", wanted = 1, law = law }
    box.run = rig:start { lasts = "1 ms" }
    local nothing, message, status = box.run:advance "1 ms"
    equal(nothing, nil)
    equal(status, "LW_ERR_LAW")
    equal(message:find("a function of a run may not advance that run", 1, true) ~= nil, true,
      message)
  end)

  test("a_law_called_from_inside_itself_fails_cleanly", function()
    local box = {}
    local law = lw.law.own { step = function(wanted, measured)
      local _, message = box.rig:run { lasts = "1 ms" }:status()
      local told = message:find("a function of a run may not run itself", 1, true)
      return (told and 1 or 0) + 0 * (wanted + measured)
    end }
    box.rig = coil.loop { inductance = 1, period = "100 us", wanted = 1, law = law }
    -- each inner run ends by the law that is busy; the outer one goes on with what it returns
    local run = box.rig:run { lasts = "300 us", record = { "control" } }
    equal(run:status(), "done")
    harness.same_list(run:record("control").out, { 1, 1, 1, 1 })
  end)

  test("runs_within_runs_end_before_the_stack_does", function()
    local function rig_of(step)
      return coil.loop { inductance = 1, period = "1 ms", wanted = 1,
        law = lw.law.own { step = step } }
    end
    local function step(wanted, measured, now)
      local run = rig_of(step):run { lasts = 0.001 }
      local status, message = run:status()
      if status ~= "done" then error(message, 0) end
      return wanted + measured + now
    end
    local status, message = rig_of(step):run { lasts = "1 ms" }:status()
    equal(status, "LW_ERR_LAW")
    equal(message:find("runs are within runs, more than 16 deep", 1, true) ~= nil, true, message)
  end)

  test("what_changes_from_outside_during_a_run_is_named_too", function()
    local gain, later = 1, nil
    local law = lw.law.own { step = function(wanted, measured)
      return (later or gain) * (wanted - measured)
    end }
    local rig = coil.loop { inductance = 1, period = "100 us", wanted = 1, law = law }
    local run = rig:start { lasts = "1 ms" }
    later = 2
    raises(function() run:advance("1 ms"):finish() end, "the captured later changed")
    run = rig:start { lasts = "1 ms" }
    gain = 3
    raises(function() run:advance("1 ms"):finish() end, "the captured gain changed")
  end)

  test("own_laws_refuse_what_cannot_be_matched", function()
    refuses('lw.law.own { step = 1 }', "step is 1; a function written in Lua")
    refuses('lw.law.own { step = print }', "a function written in Lua")
    refuses('lw.law.own {}', "step is missing")
    refuses('lw.law.own { step = function(...) return 1 end }', "step takes ...")
    refuses('lw.law.own { step = function(s) return 1, s end, state = { q = 1, s = 0 } }',
      'state: step has no parameter "q"')
    refuses('lw.law.own { step = function(dt) return 1, dt end, state = { dt = 1 } }',
      "the name stands for time")
    refuses('lw.law.own { step = function(s) return 1, s end, state = { s = {} } }', "empty list")
    refuses('lw.law.own { step = function(s) return 1, s end, state = { s = "x" } }', "s:")
    refuses('lw.law.own { step = function(s) return 1, s end, state = { s = 0 }, ' ..
      'outputs = { "s" } }', '"s"')
    if not string.dump then return end -- a study has no bytecode
    refuses('lw.law.own { step = load(string.dump(function(w) return w end, true)) }',
      "carries no names")
  end)

  test("a_source_function_that_fails_ends_the_run_with_its_line", function()
    local rig = mount [[local rig = lw.rig "r"
      rig:source { "x", lw.source.own { every = "1 ms", value = function(t)
        return t > 0.0025 and t.x or t
      end } }
      return rig]]
    local status, message = rig:run { lasts = "10 ms" }:status()
    equal(status, "LW_ERR_LAW")
    equal(message:find("mount.lua:4: attempt to index a number value", 1, true) ~= nil, true)
  end)

  test("draws_in_a_law_are_addressed_by_seed_run_name_and_job", function()
    local law = lw.law.own { step = function(wanted, measured, job)
      return lw.random("dither", job) + 0 * (wanted + measured)
    end }
    local rig = coil.loop { inductance = 1, period = "100 us", wanted = 0, law = law }
    local steps = rig:run { lasts = "1 ms", seed = 9, run = 4, record = { "control" } }
      :record "control"
    for k = 1, steps.n do
      equal(steps.out[k], lw.draw(9, 4, "dither", k - 1))
    end
    refuses('lw.random("dither", 1)', "mount.lua:2: random: no run is going on")
    refuses('lw.random(1, 6)', "a draw is addressed")
    refuses('lw.math.random()', "a draw is addressed")
    refuses('lw.math.randomseed(1)', "the seed is that of the study")
  end)
end

harness.run_under_all_collectors(function()
  test_own_laws()
end)
harness.finish()
