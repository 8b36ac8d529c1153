-- The Lua module's constructors and their messages. Run by a stock lua5.4 with the module on
-- package.cpath; everything once more under other ways of collecting garbage.

local harness = require "harness"
local coil = require "coil"
local lw = require "latewood"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises
local mount, refuses = coil.mount, coil.refuses

local function test_plants()
  test("ready_plants_have_the_matrices_of_their_equations", function()
    local m = lw.plant.winding { resistance = "0.8 ohm", inductance = "2 mH" }:matrices()
    near(m.A[1][1], -400, 1e-15)
    near(m.B[1][1], 500, 1e-15)
    equal(m.C[1][1], 1)
    equal(m.D[1][1], 0)
    m = lw.plant.integrator { gain = 4 }:matrices()
    equal(m.A[1][1], 0)
    equal(m.B[1][1] * m.C[1][1], 4)
  end)

  test("state_space_keeps_rows_names_start_and_delay", function()
    local p = lw.plant.state_space { A = { { 0, 1 }, { -4, -0.4 } }, B = { { 0 }, { 1 } },
      C = { { 1, 0 } }, states = { "place", "rate" }, inputs = { "force" }, outputs = { "seen" },
      start = { 0.5, "-0.25 m/s" }, delay = "2 us" }
    local m = p:matrices()
    equal(m.A[2][1], -4)
    equal(m.D[1][1], 0)
    harness.same_list(m.start, { 0.5, -0.25 })
    near(m.delay[1], 2e-6, 1e-15)
    harness.same_list(p:states(), { "place", "rate" })
    harness.same_list(p:inputs(), { "force" })
    harness.same_list(p:outputs(), { "seen" })
  end)

  test("a_gain_has_no_states", function()
    local m = lw.plant.gain { gain = 3 }:matrices()
    equal(#m.A, 0)
    equal(m.D[1][1], 3)
  end)

  test("transfer_functions_take_one_polynomial_or_rows_of_them", function()
    local one = lw.plant.transfer { num = { 2 }, den = { 1, 3 } }:matrices()
    near(one.A[1][1], -3, 1e-15)
    near(one.B[1][1] * one.C[1][1], 2, 1e-15)
    local two = lw.plant.transfer { num = { { { 1 }, { 2 } } }, den = { { { 1, 1 }, { 1, 2 } } },
      inputs = { "a", "b" } }
    harness.same_list(two:inputs(), { "a", "b" })
    equal(#two:matrices().A, 2)
  end)

  test("zeros_and_poles_may_be_complex", function()
    local p = lw.plant.zeros_poles { poles = { { -1, 2 }, { -1, -2 } }, gain = 5 }
    equal(#p:states(), 2)
  end)

  test("two_mass_drive_takes_data_sheet_values_with_units", function()
    local p = lw.plant.two_mass_drive { resistance = 0.8, inductance = "2 mH",
      torque_constant = "0.05 N m/A", motor_inertia = "4e-4 kg m^2", load_inertia = 0.02,
      stiffness = "90 N m", damping = 0.02 }
    equal(#p:states(), #lw.plant.two_mass_drive { resistance = 1, inductance = 1,
      torque_constant = 1, motor_inertia = 1, load_inertia = 1, stiffness = 1 }:states())
    harness.same_list(p:inputs(), { "voltage", "load_torque" })
  end)

  test("plants_join_in_series_parallel_and_feedback", function()
    local g = function(k) return lw.plant.gain { gain = k } end
    equal(lw.plant.series(g(2), g(3), g(4)):matrices().D[1][1], 24)
    equal(lw.plant.parallel(g(2), g(3)):matrices().D[1][1], 5)
    equal(lw.plant.parallel(g(2), g(3), -1):matrices().D[1][1], -1)
    -- closed form: 1 / (s + 1)
    local closed = lw.plant.feedback(lw.plant.integrator { gain = 1 })
    near(closed:matrices().A[1][1], -1, 1e-15)
  end)

  test("plants_connect_by_names", function()
    local p = lw.plant.connect {
      parts = { { "coil", lw.plant.winding { resistance = 1, inductance = 1 } },
        { "sense", lw.plant.first_order { time_constant = "1 s" } } },
      links = { { "coil.current", "sense.in", sign = -1 } },
      inputs = { { "voltage", "coil.voltage" } }, outputs = { { "seen", "sense.out" } } }
    harness.same_list(p:inputs(), { "voltage" })
    harness.same_list(p:outputs(), { "seen" })
    equal(#p:states(), 2)
  end)
end

-- ---------------------------------------------------------------- messages of fields

local function test_messages()
  test("an_unknown_field_is_named_with_the_nearest_one", function()
    refuses('lw.plant.winding { resistance = 1, inductanse = 1 }',
      'mount.lua:2: plant winding: no field "inductanse"; nearest "inductance"')
  end)

  test("of_several_unknown_fields_the_first_in_order_is_named", function()
    refuses('lw.plant.winding { zz = 1, resistance = 1, inductance = 1, aa = 2, mm = 3 }',
      'no field "aa"')
  end)

  test("keys_that_are_no_texts_are_unknown_too", function()
    refuses('lw.plant.winding { 4, resistance = 1, inductance = 1 }', "no field", "1")
    refuses('lw.plant.winding { [true] = 4, resistance = 1, inductance = 1 }', "true")
  end)

  test("a_missing_field_is_named", function()
    refuses('\nlw.plant.winding { resistance = 1 }',
      "mount.lua:3: plant winding: inductance is missing")
  end)

  test("a_wrong_type_says_what_is_wanted", function()
    refuses('lw.plant.winding { resistance = {}, inductance = 1 }',
      "mount.lua:2: plant winding: resistance is a table", "ohm")
    refuses('lw.plant.winding { resistance = lw.timing.constant(1), inductance = 1 }',
      "resistance is a timing")
    refuses('lw.plant.winding(7)', "mount.lua:2: plant winding: one table of fields", "7")
    refuses('lw.plant.winding()', "mount.lua:2: plant winding: one table of fields", "nil")
  end)

  test("a_wrong_unit_says_what_was_given_and_what_is_wanted", function()
    refuses('lw.plant.winding { resistance = "5 V", inductance = 1 }',
      "mount.lua:2: plant winding: resistance:", "5 V")
    refuses('lw.plant.winding { resistance = "5 furlong", inductance = 1 }', "furlong")
    refuses('lw.timing.uniform("1 us", "5 V")', "mount.lua:2: timing uniform: hi:", "5 V")
  end)

  test("hertz_and_radians_a_second_do_not_pass_for_each_other", function()
    refuses('lw.plant.second_order { natural_frequency = "10 Hz", damping = 0.1 }',
      'natural_frequency: "10 Hz" is a frequency; an angular frequency')
    refuses('lw.source.sine { amplitude = 1, frequency = "10 rad/s" }',
      'frequency: "10 rad/s" is an angular frequency; a frequency')
  end)

  test("infinite_and_undefined_numbers_are_refused", function()
    refuses('lw.plant.winding { resistance = 0/0, inductance = 1 }', "resistance is ",
      "a finite number is wanted")
    refuses('lw.plant.winding { resistance = 1, inductance = math.huge }', "inductance is inf",
      "a finite number is wanted")
    refuses('lw.plant.state_space { A = { { 0/0 } }, B = { { 1 } }, C = { { 1 } } }', "A[1][1]")
  end)

  test("the_engine_refuses_values_out_of_range_at_the_same_line", function()
    refuses('lw.plant.winding { resistance = 1, inductance = -1 }', "mount.lua:2: ", "inductance",
      "-1")
    refuses('lw.law.pi { kp = 1, ki = 1, limit = { 1, 1 } }', "limit is { 1, 1 }")
    refuses('lw.law.lead { zero = 1, pole = -1 }', "mount.lua:2: law lead: ", "pole")
    refuses('lw.timing.uniform(2, 1)', "mount.lua:2: timing uniform: ")
  end)

  test("a_choice_lists_what_is_permitted", function()
    refuses('lw.law.pi { kp = 1, ki = 1, anti_windup = "off" }',
      'law pi: anti_windup is "off"; permitted are "none", "clamp", "pause", "back-calculation"')
  end)

  test("texts_with_a_zero_byte_are_refused_by_name", function()
    refuses('lw.rig("a\\0b")', "rig: its name has a zero byte")
    refuses('lw.rig("r"):value { "a\\0b" }', "zero byte")
    refuses('lw.plant.gain { gain = "5\\0 V" }', "gain has a zero byte")
  end)

  test("names_are_checked_as_utf_8", function()
    refuses('lw.rig("r"):value { "\\xff" }', "mount.lua:2: ", "value")
    mount('lw.rig("r"):value { "Größe" }')
  end)

  test("shapes_are_checked", function()
    refuses('lw.plant.state_space { A = { { 0, 1 }, { 1 } }, B = { { 1 } }, C = { { 1 } } }',
      "A has rows of 2 and of 1 numbers")
    refuses('lw.plant.state_space { A = { { 0 } }, B = { { 1 } }, C = { { 1, 2 } } }',
      "C is 1 x 2; 1 x 1 is wanted")
    refuses('lw.plant.state_space { A = { 1, 2 }, B = { { 1 } }, C = { { 1 } } }',
      "A[1] is 1", "row")
    refuses('lw.plant.gain { gain = 1, start = { 1 } }', "start has 1 numbers")
    refuses('lw.plant.gain { gain = 1, inputs = { "a", "b" } }', "inputs has 2 names")
  end)

  test("lists_with_gaps_or_names_are_refused", function()
    refuses('lw.timing.discrete { values = { 1, nil, 3, n = 2 } }', "values has the key")
    refuses('lw.timing.discrete { values = { 1, "x" } }', "values[2]")
  end)

  test("cyclic_tables_end_in_a_message", function()
    refuses('local t = {} t[1] = t lw.plant.state_space { A = t, B = t, C = t }', "plant")
    refuses('local t = {} t[1] = t lw.plant.transfer { num = t, den = t }', "plant transfer")
    refuses('local t = {} t.gain = t lw.plant.gain(t)', "gain is a table")
  end)

  test("tables_are_read_raw", function()
    refuses([[lw.plant.gain(setmetatable({}, { __index = function() error "called" end }))]],
      "gain is missing")
  end)

  test("a_name_the_module_lacks_is_offered_the_nearest", function()
    refuses('lw.plant.intergrator { gain = 1 }',
      'mount.lua:2: lw.plant has no "intergrator"; nearest "integrator"')
    refuses('lw.plants()', 'latewood has no "plants"; nearest "plant"')
    refuses('lw.rig("r"):sorce { "x" }', 'a rig has no "sorce"; nearest "source"')
  end)

  test("delays_are_stated_by_input_where_there_are_several", function()
    local data = "resistance = 1, inductance = 1, torque_constant = 1, inertia = 1"
    refuses("lw.plant.dc_machine { " .. data .. ', delay = "1 us" }', "2 inputs")
    refuses("lw.plant.dc_machine { " .. data .. ', delay = { voltag = "1 us" } }',
      'delay: no field "voltag"; nearest "voltage"')
    local p = mount("return lw.plant.dc_machine { " .. data .. ', delay = { voltage = "1 us" } }')
    near(p:matrices().delay[1], 1e-6, 1e-15)
    equal(p:matrices().delay[2], 0)
  end)

  test("joining_refuses_what_is_no_plant", function()
    refuses('lw.plant.series(lw.plant.gain { gain = 1 }, 2)',
      "mount.lua:2: plant series: argument 2 is 2; a plant is wanted")
    refuses('lw.plant.parallel(lw.plant.gain { gain = 1 }, lw.plant.gain { gain = 1 }, 2)',
      "sign is 2")
    refuses('lw.plant.connect { parts = { { "a", 1 } }, inputs = {}, outputs = {} }', "parts[1]",
      "a plant is wanted")
  end)

  test("lines_are_those_of_the_users_innermost_function", function()
    refuses('local function make(g)\n  return lw.plant.gain { gain = g }\nend\nmake("x")',
      "mount.lua:3: plant gain: gain")
  end)
end

-- ---------------------------------------------------------------- timings, sources, laws

local function test_timings()
  test("timings_tell_support_median_and_draws_by_address", function()
    local t = lw.timing.uniform("6 us", "11 us")
    local lo, hi = t:support()
    near(lo, 6e-6, 1e-15)
    near(hi, 11e-6, 1e-15)
    near(t:median(), 8.5e-6, 1e-12)
    near(t:cdf("8.5 us"), 0.5, 1e-12)
    near(t:quantile(0.2), 7e-6, 1e-12)
    near(t:moment(1), 8.5e-6, 1e-12)
    equal(t:draw(7, 3, 12, "link.takes"), t:draw(7, 3, 12, "link.takes"))
    equal(t:draw(7, 3, 12, "link.takes") == t:draw(7, 3, 13, "link.takes"), false)
    local x, w = t:nodes(4)
    local sum = 0
    for i = 1, 4 do sum = sum + w[i] end
    equal(#x, 4)
    near(sum, 1, 1e-13)
  end)

  test("a_uniform_draw_is_the_quantile_of_the_addressed_uniform", function()
    local t = lw.timing.uniform(2, 3)
    near(t:draw(7, 3, 12, "x"), 2 + lw.draw(7, 3, "x", 12), 1e-15)
  end)

  test("timings_add_scale_and_take_the_maximum", function()
    local t = lw.timing.uniform(1, 2)
    local lo, hi = (t + lw.timing.uniform(10, 20)):support()
    equal(lo, 11)
    equal(hi, 22)
    lo, hi = (t + "500 ms"):support()
    equal(lo, 1.5)
    equal(hi, 2.5)
    lo, hi = (3 * t):support()
    equal(lo, 3)
    equal(hi, 6)
    lo, hi = lw.timing.maximum(t, 1.5):support()
    equal(lo, 1.5)
    equal(hi, 2)
  end)

  test("every_family_can_be_made_and_described", function()
    local all = {
      lw.timing.constant("5 us"), lw.timing.triangular(1, 2, 4),
      lw.timing.normal { mean = 5, deviation = 1 },
      lw.timing.log_normal { median = 1, sigma = 0.5, shift = 0.1, hi = 9 },
      lw.timing.exponential { mean = 1, shift = "1 s" },
      lw.timing.gumbel { location = 1, scale = 0.1 },
      lw.timing.discrete { values = { 1, 2 }, weights = { 3, 1 } },
      lw.timing.histogram { edges = { 0, 1, 3 }, weights = { "50 %", 1 } },
      lw.timing.replay { values = { 1, 2, "3 s" }, start = "random" },
      lw.timing.modes { quiet = 1, burst = lw.timing.uniform(2, 3), enter = 0.1, leave = 0.5 },
      lw.timing.stall { usual = 1, stall = 5, chance = "1 %" },
      lw.timing.stall { usual = 1, stall = 5, every = 10, phase = "random" },
    }
    for _, t in ipairs(all) do
      local lo, hi = t:support()
      equal(lo <= hi, true, tostring(t))
      equal(#tostring(t) > 3, true)
    end
  end)

  test("timings_refuse_what_does_not_fit", function()
    refuses('lw.timing.normal { mean = 1 }', "timing normal: deviation is missing")
    refuses('lw.timing.histogram { edges = { 1, 2 }, weights = { 1, 2 } }', "one edge more")
    refuses('lw.timing.replay { values = { 1 }, file = "x" }', "either values or file")
    refuses('lw.timing.replay { file = "no/such/file.txt", unit = "us" }', "mount.lua:2: ",
      "no/such/file.txt")
    refuses('lw.timing.stall { usual = 1, stall = 2 }', "either chance or every")
    refuses('lw.timing.stall { usual = 1, stall = 2, every = 3, phase = "late" }',
      'phase is "late"')
    refuses('return lw.timing.uniform(1, 2) + {}', "mount.lua:2: ", "a table")
    refuses('return lw.timing.uniform(1, 2):moment(7)', "the order is 7; permitted 1 to 4")
    refuses('return lw.timing.uniform(1, 2):quantile(2)', "between 0 and 1")
  end)

  if not io then return end -- a study cannot write files to read
  test("replay_reads_a_file_in_its_unit", function()
    local path = (os.getenv "TMPDIR" or "/tmp") .. "/latewood_replay.txt"
    local file = assert(io.open(path, "w"))
    file:write("# invented\n3\n5.5\n")
    file:close()
    local lo, hi = lw.timing.replay { file = path, unit = "us" }:support()
    near(lo, 3e-6, 1e-15)
    near(hi, 5.5e-6, 1e-15)
    os.remove(path)
  end)
end

local function test_sources()
  local function value_of(source, at)
    local rig = lw.rig "r"
    rig:source { "x", source }
    local run = rig:start { lasts = 10 }
    run:advance(at)
    return run:value "x"
  end

  test("sources_have_the_values_of_their_formulas", function()
    equal(value_of(lw.source.constant "2 A", 1), 2)
    equal(value_of(lw.source.step { at = "5 ms", from = 1, to = 3 }, 0.004), 1)
    equal(value_of(lw.source.step { at = "5 ms", from = 1, to = 3 }, 0.005), 3)
    near(value_of(lw.source.ramp { slope = 2, from = 1 }, 3), 7, 1e-15)
    equal(value_of(lw.source.ramp { slope = 2, from = 1, to = 4 }, 3), 4)
    near(value_of(lw.source.sine { amplitude = 2, frequency = "1 Hz", phase = "90 deg",
      offset = 1 }, 0.5), -1, 1e-14)
    equal(value_of(lw.source.pulses { high = 5, low = 1, width = "1 s", every = "3 s" }, 0.5), 5)
    equal(value_of(lw.source.pulses { high = 5, low = 1, width = "1 s", every = "3 s" }, 2), 1)
    equal(value_of(lw.source.table { time = { 1, 2 }, value = { 10, 20 } }, 1.5), 10)
    near(value_of(lw.source.table { time = { 1, 2 }, value = { 10, 20 }, between = "lines" }, 1.5),
      15, 1e-14)
  end)

  test("a_function_of_time_is_held_on_its_clock", function()
    local own = lw.source.own { every = "1 s", value = function(t) return 10 * t end }
    equal(value_of(own, 2.5), 20)
  end)

  local function reads_tables_from_files()
    local path = (os.getenv "TMPDIR" or "/tmp") .. "/latewood_table.csv"
    local file = assert(io.open(path, "w"))
    file:write('; invented\n"t [s]", other, v\n0, 9, 1\n1, 9, 2.5\n2, 9, -3\n')
    file:close()
    equal(value_of(lw.source.table { file = path, time = "t [s]", value = "v" }, 1.5), 2.5)
    equal(value_of(lw.source.table { file = path, time = 1, value = 3 }, 2), -3)
    raises(function() lw.source.table { file = path, time = "t [s]", value = "w" } end,
      'no column "w"')
    raises(function() lw.source.table { file = path, time = 1, value = 7 } end, "column 7")
    os.remove(path)
    raises(function() lw.source.table { file = path, time = 1, value = 3 } end, path)
  end
  if io then -- a study cannot write files to read
    test("a_table_may_come_from_a_file_by_column_name_or_number", reads_tables_from_files)
  end

  test("sources_refuse_what_does_not_fit", function()
    refuses('lw.source.step { at = 1 }', "source step: to is missing")
    refuses('lw.source.noise { every = 1 }', "either deviation (normal) or spread (uniform)")
    refuses('lw.source.table { time = { 1, 2 }, value = { 1 } }', "one length is wanted")
    refuses('lw.source.own { every = 1, value = 3 }', "value is 3; a function written in Lua")
    refuses('lw.source.own { every = 1, value = lw.math.sin }', "a function written in Lua")
    refuses('local n = 0 lw.source.own { every = 1, value = function(t)\n n = t\n return n end }',
      'mount.lua:3: source own: value assigns the upvalue "n"')
  end)
end

local function test_ready_laws()
  test("laws_tell_their_inputs_outputs_and_states", function()
    local law = lw.law.pi { kp = 1.2, ki = 300, limit = { -24, 24 }, anti_windup = "pause" }
    harness.same_list(law:inputs(), { "wanted", "measured" })
    harness.same_list(law:outputs(), { "out", "unlimited" })
    harness.same_list(law:states(), { "integral" })
  end)

  test("every_ready_law_can_be_made", function()
    lw.law.p { kp = "2 V/A", limit = { "-24 V", "24 V" } }
    lw.law.pd { kp = 1, kd = 0.1, filter = "1 ms", derivative_of = "measured" }
    lw.law.pid { kp = 1, ki = 1, kd = 1, integration = "trapezoidal", order = "update first",
      period = "measured", anti_windup = "back-calculation", kb = 2, limit = { -1, 1 },
      start = 0.5 }
    lw.law.lead { gain = 2, zero = "10 rad/s", pole = 100 }
    lw.law.biquad { b = { 1, 2, 1 }, a = { 1, 0.5, 0.25 } }
    lw.law.z_transfer { b = { 1 }, a = { 1, -0.5 } }
    harness.same_list(lw.law.state_feedback { K = { { 1, 2 } }, N = 1 }:inputs(),
      { "wanted", "measured1", "measured2" })
    lw.law.observer { A = { { 1, 0.1 }, { 0, 1 } }, B = { { 0 }, { 1 } }, C = { { 1, 0 } },
      L = { { 0.5 }, { 0.5 } }, K = { { 1, 2 } }, N = { { 1 } }, start = { 0, 0 } }
  end)

  test("a_kind_takes_only_its_own_gains", function()
    refuses('lw.law.p { kp = 1, ki = 2 }', 'law p: no field "ki"')
    refuses('lw.law.pi { kp = 1 }', "law pi: ki is missing")
    refuses('lw.law.biquad { b = { 1 }, a = { 1, 0, 0 } }', "b has 1 numbers and a 3")
    refuses('lw.law.observer { A = { { 1 } }, B = { { 1 } }, C = { { 1 } }, L = { { 1, 2 } }, ' ..
      'K = { { 1 } } }', "L is 1 x 2; 1 x 1 is wanted")
  end)
end

local function test_values()
  test("quantising_gives_value_and_code", function()
    -- LSB = 1 / 16, 0.3 / LSB = 4.8
    local value, code = lw.quantise(0.3, { bits = 4, range = { 0, 1 } })
    equal(code, 5)
    equal(value, 5 / 16)
    equal(select(2, lw.quantise(0.3, { bits = 4, range = { 0, 1 }, rounding = "floor" })), 4)
    refuses('lw.quantise(1, { bits = 40, range = { 0, 1 } })', "mount.lua:2: quantise: ", "bits")
  end)

  test("mathematics_follows_the_manual", function()
    local m = lw.math
    for _, name in ipairs { "sin", "cos", "tan", "asin", "acos", "exp", "sqrt" } do
      near(m[name](0.3), math[name](0.3), 4e-16)
    end
    for _, x in ipairs { -2.5, 2.5, 7, -7, 2 ^ 60, 0.0 } do
      for _, name in ipairs { "floor", "ceil", "abs", "tointeger", "type" } do
        equal(m[name](x), math[name](x), name)
        equal(math.type(m[name](x)), math.type(math[name](x)), name)
      end
      harness.same_list({ m.modf(x) }, { math.modf(x) })
    end
    near(m.atan(1, -2), math.atan(1, -2), 4e-16)
    near(m.atan(3), math.atan(3), 4e-16)
    near(m.log(8, 2), 3, 1e-15)
    near(m.log(1000, 10), 3, 1e-15)
    near(m.log(5, 3), math.log(5, 3), 1e-15)
    equal(m.fmod(7, -3), math.fmod(7, -3))
    equal(m.fmod(-7.5, 2), math.fmod(-7.5, 2))
    equal(m.max(1, 3.5, 2), 3.5)
    equal(m.min(4, 2, 9), 2)
    equal(m.ult(1, -1), true)
    equal(m.pi, math.pi)
    equal(m.huge, math.huge)
    equal(m.maxinteger, math.maxinteger)
    near(m.tanh(0.5), 0.46211715726000975, 1e-15)
    near(m.hypot(3, 4), 5, 1e-15)
    near(m.expm1(1e-10), 1e-10, 1e-9)
    for _, name in ipairs { "abs", "acos", "asin", "atan", "ceil", "cos", "deg", "exp", "floor",
      "fmod", "huge", "log", "max", "maxinteger", "min", "mininteger", "modf", "pi", "rad",
      "random", "randomseed", "sin", "sqrt", "tan", "tointeger", "type", "ult" } do
      equal(type(m[name]), type(math[name]), name)
    end
  end)

  test("quantities_and_names_serve_scripts", function()
    near(lw.quantity("50 us", "s"), 5e-5, 1e-15)
    near(lw.quantity("8 %", "1"), 0.08, 1e-15)
    equal(lw.quantity(3), 3)
    equal(lw.number_text(0.1), "0.1")
    equal(lw.nearest("speeed", { "current", "speed" }), "speed")
    equal(lw.nearest("xyz", { "current", "speed" }), nil)
    equal(#lw.metric_kinds() > 10, true)
    refuses('lw.fail("no such thing")', "mount.lua:2: no such thing")
    equal(lw.int(5):value(), 5)
    refuses('lw.int(0.5)', "the number is 0.5; a whole number")
  end)

  test("the_module_sets_no_globals", function()
    if not package then return end -- in the program it is opened before a study sees it
    local before = {}
    for k in pairs(_G) do before[k] = true end
    package.loaded.latewood = nil
    local again = require "latewood"
    equal(again ~= nil, true)
    package.loaded.latewood = lw
    for k in pairs(_G) do equal(before[k], true, tostring(k)) end
  end)

  test("classes_cannot_be_reached_into", function()
    equal(getmetatable(lw.plant.gain { gain = 1 }), false)
    raises(function() setmetatable(lw, {}) end, "protected")
  end)
end

harness.run_under_all_collectors(function()
  test_plants()
  test_messages()
  test_timings()
  test_sources()
  test_ready_laws()
  test_values()
end)
harness.finish()
