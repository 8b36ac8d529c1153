-- Malformed studies: each gives one clear message, with file and line where there is one, and the
-- documented exit code; nothing is left behind.
--
-- A case is a name, what it changes in a sound study, the exit code, and a pattern of the message
-- after "latewood: ". Patterns begin with the file's name and line where the fault has one.

local program = os.getenv "LATEWOOD" or "build/latewood"
local folder = (os.getenv "TMPDIR" or "/tmp") .. "/malformed"
local passed, failed = 0, 0

-- A sound study; every piece can be replaced by a case.
local sound = {
  before = "",
  plant = 'rig:plant { "coil", lw.plant.winding { resistance = 0.5, inductance = "4 mH" } }',
  adc = 'rig:adc { "current", of = "coil.current", every = "100 us", bits = 12, range = { -8, 8 } }',
  dac = 'rig:dac { "bridge", to = "coil.voltage", range = { -24, 24 } }',
  law = "lw.law.pi { kp = 10, ki = 2000 }",
  latency = '"37 %"',
  loop = 'rig:loop { "control", law = LAW, wanted = 2, measured = "current", output = "bridge", ' ..
    "latency = LATENCY }",
  more = "",
  result = "return rig",
  study = 'lw.study { build, lasts = "2 ms", given = { gain = 1 } }',
  requirement = 'study:requirement { "overshoot", of = "coil.current", level = 2, at_most = "20 %" }',
  ending = "return study",
}

-- Line numbers of the pieces in the text below: before 2, plant 5, adc 6, dac 7, loop 8, more 9,
-- result 10, study 12, requirement 13.
local function text_of(change)
  local t = setmetatable(change, { __index = sound })
  local loop = t.loop:gsub("LAW", function() return t.law end)
    :gsub("LATENCY", function() return t.latency end)
  return table.concat({ 'local lw = require "latewood"', t.before, "local function build(p)",
    '  local rig = lw.rig "coil"', t.plant, t.adc, t.dac, loop, t.more, t.result, "end",
    "local study = " .. t.study, t.requirement, t.ending }, "\n") .. "\n"
end

local DATA = 65
local cases = {
  -- flows
  { "a_flow_with_an_unknown_parameter", { plant = 'rig:plant { "coil", lw.plant.flow { ' ..
    'states = { "current" }, inputs = { "voltage" }, flow = function(curent, voltage) ' ..
    'return voltage end } }' }, DATA,
    ':5: plant flow: flow: its parameter "curent" is no state.*nearest "current"' },
  { "a_flow_that_returns_too_little", { plant = 'rig:plant { "coil", lw.plant.flow { ' ..
    'states = { "current", "heat" }, inputs = { "voltage" }, flow = function(voltage) ' ..
    'return voltage end } }' }, DATA, ":5: plant flow: flow returns 1 values" },
  { "a_flow_in_a_connection_of_matrices", { plant = 'rig:plant { "coil", lw.plant.series(' ..
    'lw.plant.flow { states = { "current" }, inputs = { "voltage" }, ' ..
    'flow = function(current, voltage) return voltage - current end }, ' ..
    'lw.plant.gain { gain = 1 }) }' }, DATA, ':5: .*the plant is a flow and has no matrices' },
  -- sensors
  { "an_encoder_without_counts", { more = 'rig:encoder { "angle", of = "coil.current", counts = 0, ' ..
    'every = "1 ms" }' }, DATA, ':9: encoder "angle": counts is 0; permitted 1 to 16777216' },
  { "an_encoder_of_nothing", { more = 'rig:encoder { "angle", of = "coil.curent", counts = 9, ' ..
    'every = "1 ms" }' }, DATA, ':9: adc "angle": of: no signal "coil.curent"; nearest' },
  { "a_filter_of_no_kind", { adc = 'rig:adc { "current", of = "coil.current", filter = { "boxes" } }' },
    DATA, ':6: adc "current": filter: its first element' },
  { "a_filter_with_another_clock", { adc = 'rig:adc { "current", of = "coil.current", every = 1, ' ..
    'filter = { "sinc", order = 3, ratio = 8, clock = "1 MHz" } }' }, DATA,
    ':6: adc "current": a decimation filter has its own clock' },
  { "an_analog_filter_of_high_order", { adc = 'rig:adc { "current", of = "coil.current", ' ..
    'every = "1 ms", analog = { order = 9, cut_off = "1 kHz" } }' }, DATA,
    ':6: adc "current": analog order is 9; permitted 1 to 8' },
  { "white_noise_seen_between_anchors", { more = 'rig:noise { "hum", on = "coil.voltage", ' ..
    'density = 1 } rig:adc { "odd", of = "coil.current", every = "150 us" }' }, DATA,
    ':9: noise "hum": adc "odd" looks at the plant away from its anchors.*held noise' },
  { "white_noise_on_no_input", { more = 'rig:noise { "hum", on = "coil.volts", density = 1 }' }, DATA,
    ':9: noise "hum": on: no plant input "coil.volts"; nearest "coil.voltage"' },
  -- units and numbers
  { "a_wrong_unit", { adc = 'rig:adc { "current", of = "coil.current", every = "5 V" }' }, DATA,
    ':6: adc "current": every.*"5 V" is a voltage' },
  { "an_unknown_unit", { adc = 'rig:adc { "current", of = "coil.current", every = "5 uss" }' }, DATA,
    ':6: .*unit "uss" is not known' },
  { "text_for_a_number", { law = 'lw.law.pi { kp = "ten", ki = 1 }' }, DATA, ":8: law pi: kp" },
  { "not_a_number", { law = "lw.law.pi { kp = 0/0, ki = 1 }" }, DATA, ":8: law pi: kp" },
  { "an_infinite_number", { law = "lw.law.pi { kp = 1/0, ki = 1 }" }, DATA, ":8: law pi: kp" },
  { "a_comparator_without_a_level",
    { more = 'rig:comparator { "over", of = "coil.current" }' }, DATA,
    ':9: comparator "over": above or below is missing' },
  { "a_comparator_with_two_levels",
    { more = 'rig:comparator { "over", of = "coil.current", above = 1, below = 2 }' }, DATA,
    ':9: comparator "over": both above and below' },
  { "a_comparator_of_no_plant",
    { more = 'rig:comparator { "over", of = "current", above = 1 }' }, DATA,
    ':9: comparator "over": neither of nor above is a signal of a plant' },
  { "a_comparator_of_nothing",
    { more = 'rig:comparator { "over", of = "coil.curent", above = 1 }' }, DATA,
    ':9: comparator "over": of: no signal "coil.curent"; nearest "coil.current"' },
  { "a_negative_hysteresis",
    { more = 'rig:comparator { "over", of = "coil.current", above = 1, hysteresis = -1 }' }, DATA,
    ':9: comparator "over": hysteresis is %-1; permitted from 0 on' },
  { "a_pwm_with_a_peak_on_a_sawtooth",
    { more = 'rig:pwm { "leg", to = "coil.voltage", carrier = "20 kHz", reload = "peak" }' }, DATA,
    ":9: pwm \"leg\": reload: a sawtooth has no peak" },
  { "a_pwm_without_a_carrier", { more = 'rig:pwm { "leg", to = "coil.voltage" }' }, DATA,
    ":9: pwm \"leg\": carrier is missing" },
  { "an_adc_at_no_pwm",
    { more = 'rig:adc { "late", of = "coil.current", at = "bridge" }' }, DATA,
    ":9: adc \"late\": at: no pwm" },
  { "a_trip_by_nothing",
    { more = 'rig:trip { "off", by = "over", output = "bridge", to = 0, lasts = "until end" }' },
    DATA, ':9: trip "off": by: no comparator "over"' },
  { "a_trip_without_an_end",
    { more = 'rig:trip { "off", by = "over", output = "bridge", to = 0 }' }, DATA,
    ':9: trip "off": lasts is missing' },
  { "an_adc_after_an_event_without_a_period",
    { more = 'rig:comparator { "over", of = "coil.current", above = 1 } ' ..
      'rig:adc { "peak", of = "coil.current", after = "over" }' }, DATA,
    ':9: adc "peak": what "over" triggers has no period; a nominal period' },
  { "a_negative_period", { adc = 'rig:adc { "current", of = "coil.current", every = -1 }' }, DATA,
    ':6: adc "current": every' },
  { "a_period_of_zero", { adc = 'rig:adc { "current", of = "coil.current", every = 0 }' }, DATA,
    ':6: adc "current": every' },
  { "a_period_below_a_tick", { adc = 'rig:adc { "current", of = "coil.current", every = "0.1 ps" }' },
    DATA, ':6: adc "current": every' },
  { "a_period_beyond_time", { adc = 'rig:adc { "current", of = "coil.current", every = "1e9 s" }' },
    DATA, ':6: adc "current": every' },
  { "a_negative_conversion_time",
    { adc = 'rig:adc { "current", of = "coil.current", every = "1 ms", takes = "-1 us" }' }, DATA,
    ':6: adc "current": takes is %-1e%-06' },
  { "a_conversion_longer_than_the_period",
    { adc = 'rig:adc { "current", of = "coil.current", every = "1 ms", takes = "2 ms" }' }, DATA,
    ':6: adc "current": takes is 0.002; a conversion lasts at most one period' },
  { "a_negative_latency", { latency = '"-3 us"' }, DATA, ':8: loop "control": latency' },
  { "a_latency_below_the_conversion",
    { adc = 'rig:adc { "current", of = "coil.current", every = "100 us", takes = "5 us" }',
      latency = '"1 us"' }, DATA,
    ':8: loop "control": latency is 1e%-06 s; it includes the conversion and is at least 5e%-06' },
  { "a_latency_in_volts", { latency = '"3 V"' }, DATA, ':8: loop "control": latency' },
  { "an_unknown_fate", { latency = '{ "3 us", "dropped" }' }, DATA, ':8: loop "control": latency' },
  { "a_chance_above_one", { loop = 'rig:loop { "control", law = LAW, wanted = 2, ' ..
    'measured = "current", output = "bridge", lost = 1.5 }' }, DATA,
    ':8: loop "control": lost is 1.5; a chance from 0 to 1 is wanted' },
  -- fields and names
  { "a_missing_field", { plant = 'rig:plant { "coil", lw.plant.winding { resistance = 1 } }' }, DATA,
    ":5: plant winding: inductance is missing" },
  { "a_field_that_is_not_known",
    { plant = 'rig:plant { "coil", lw.plant.winding { resistence = 1, inductance = 1 } }' }, DATA,
    ':5: plant winding: .*"resistence"; nearest "resistance"' },
  { "a_negative_inductance",
    { plant = 'rig:plant { "coil", lw.plant.winding { resistance = 1, inductance = -1 } }' }, DATA,
    ":5: plant winding: inductance is %-1; permitted above 0" },
  { "an_unknown_signal", { adc = 'rig:adc { "current", of = "coil.curent", every = "1 ms" }' }, DATA,
    ':6: adc "current": of: no signal "coil.curent"; nearest "coil.current"' },
  { "an_unknown_plant_input", { dac = 'rig:dac { "bridge", to = "coil.voltag" }' }, DATA,
    ':7: dac "bridge": to: no plant input "coil.voltag"; nearest "coil.voltage"' },
  { "an_unknown_output", { loop = 'rig:loop { "control", law = LAW, wanted = 2, ' ..
    'measured = "current", output = "brige" }' }, DATA,
    ':8: loop "control": output: no dac or value "brige"; nearest "bridge"' },
  { "an_unknown_measured_signal", { loop = 'rig:loop { "control", law = LAW, wanted = 2, ' ..
    'measured = "curent", output = "bridge" }' }, DATA,
    ':8: loop "control": measured: no signal "curent"; nearest "current"' },
  { "an_input_the_law_does_not_have", { loop = 'rig:loop { "control", law = LAW, wanted = 2, ' ..
    'mesured = "current", output = "bridge" }' }, DATA, ':8: loop "control": .*mesured' },
  { "a_loop_without_an_adc", { loop = 'rig:loop { "control", law = LAW, wanted = 2, ' ..
    'measured = 3, output = "bridge" }' }, DATA, ':8: loop "control": no input is an adc' },
  { "an_unknown_parameter_read", { law = "lw.law.pi { kp = p.gian, ki = 1 }" }, DATA,
    ':8: the study gives no parameter "gian"; nearest "gain"' },
  { "a_parameter_assigned", { more = "p.gain = 2" }, DATA, ':9: parameter "gain" is assigned' },
  { "an_unknown_constructor", { law = "lw.law.pid2 { kp = 1 }" }, DATA, ':8: .*"pid2"' },
  { "an_unknown_method", { more = "rig:plants {}" }, DATA, ':9: .*"plants"; nearest "plant"' },
  { "a_duplicate_name", { more = 'rig:value { "bridge" }' }, DATA,
    ':9: value "bridge": the name is taken by a dac' },
  { "an_input_driven_twice", { more = 'rig:dac { "second", to = "coil.voltage" }' }, DATA,
    ':9: dac "second": to: plant input "coil.voltage" already has a driver' },
  { "an_output_written_twice", { more = 'rig:loop { "second", law = lw.law.p { kp = 1 }, wanted = 1, '
    .. 'measured = "current", output = "bridge" }' }, DATA,
    ':9: loop "second": output: "bridge" is already written by a loop' },
  { "a_dot_in_a_name", { more = 'rig:value { "a.b" }' }, DATA, ':9: value "a.b": a name holds no dot' },
  { "a_nul_in_a_name", { more = 'rig:value { "a\\0b" }' }, DATA, ":9: .*value" },
  { "a_control_character_in_a_name", { more = 'rig:value { "a\\nb" }' }, DATA, ":9: .*control" },
  { "a_name_that_is_too_long", { more = 'rig:value { ("x"):rep(201) }' }, DATA,
    ":9: .*201 bytes; permitted 1 to 200" },
  { "a_name_that_is_not_utf8", { more = 'rig:value { "\\xff" }' }, DATA, ":9: .*UTF%-8" },
  { "an_empty_name", { more = 'rig:value { "" }' }, DATA, ":9: .*name" },
  { "no_name", { more = "rig:value { start = 1 }" }, DATA, ":9: .*name is missing" },
  -- shapes
  { "ragged_rows", { plant = 'rig:plant { "coil", lw.plant.state_space { A = { { 1, 2 }, { 3 } }, ' ..
    "B = { { 1 }, { 1 } }, C = { { 1, 0 } } } }" }, DATA, ":5: plant state_space: A" },
  { "matrices_that_do_not_fit", { plant = 'rig:plant { "coil", lw.plant.state_space { ' ..
    "A = { { 1 } }, B = { { 1 }, { 2 } }, C = { { 1 } } } }" }, DATA, ":5: plant state_space: B" },
  { "a_start_of_the_wrong_length", { plant = 'rig:plant { "coil", lw.plant.state_space { ' ..
    "A = { { 1 } }, B = { { 1 } }, C = { { 1 } }, start = { 1, 2 } } }" }, DATA, ":5: .*start" },
  { "an_improper_transfer_function", { plant = 'rig:plant { "coil", lw.plant.transfer { ' ..
    "num = { 1, 0, 0 }, den = { 1, 1 } } }" }, DATA, ":5: .*degree 2 over degree 1" },
  { "a_denominator_that_begins_with_zero", { plant = 'rig:plant { "coil", lw.plant.transfer { ' ..
    "num = { 1 }, den = { 0, 1, 1 } } }" }, DATA, ":5: .*den" },
  { "a_pole_without_its_conjugate", { plant = 'rig:plant { "coil", lw.plant.zeros_poles { ' ..
    "zeros = {}, poles = { { -1, 2 } }, gain = 1 } }" }, DATA, ":5: .*conjugate" },
  { "an_algebraic_loop", { more = 'rig:plant { "a", lw.plant.gain { gain = 0.5 } } ' ..
    'rig:plant { "b", lw.plant.gain { gain = 0.5 } } ' ..
    'rig:connect { "a.out", to = "b.in" } rig:connect { "b.out", to = "a.in" }' }, DATA,
    ":9: signals depend on themselves without delay: .*a.out %-> b.in" },
  { "adcs_that_trigger_one_another", { more = 'rig:adc { "x", of = "coil.current", after = "y" } ' ..
    'rig:adc { "y", of = "coil.current", after = "x" }' }, DATA, ":9: adc .*ring" },
  { "bits_out_of_range",
    { adc = 'rig:adc { "current", of = "coil.current", every = 1, bits = 99, range = { -1, 1 } }' },
    DATA, ':6: adc "current": bits is 99; permitted 0 to 32' },
  { "a_range_that_is_turned_round",
    { dac = 'rig:dac { "bridge", to = "coil.voltage", range = { 24, -24 } }' }, DATA,
    ':7: dac "bridge": range' },
  { "a_range_that_begins_within_a_step",
    { adc = 'rig:adc { "current", of = "coil.current", every = 1, bits = 3, range = { -1, 2 } }' },
    DATA, ':6: adc "current": range begins at %-1' },
  { "bits_without_a_range",
    { adc = 'rig:adc { "current", of = "coil.current", every = 1, bits = 3 }' }, DATA,
    ':6: adc "current": bits is 3 but range is missing' },
  { "table_times_that_fall", { more = 'rig:source { "s", lw.source.table { time = { 0, 2, 1 }, ' ..
    "value = { 0, 1, 2 } } }" }, DATA, ":9: .*times must rise" },
  { "a_table_of_unequal_lists", { more = 'rig:source { "s", lw.source.table { time = { 0, 1 }, ' ..
    "value = { 0 } } }" }, DATA, ":9: " },
  -- files
  { "a_missing_data_file", { before = 'local r = lw.timing.replay { file = "none.txt" }' }, DATA,
    ":2: .*none.txt" },
  { "a_data_file_with_a_bad_line",
    { before = 'local r = lw.timing.replay { file = "bad.txt", unit = "us" }' }, DATA,
    ":2: .*bad.txt:2: \"two\" is no duration" },
  { "a_path_that_leaves_the_folder",
    { before = 'local r = lw.timing.replay { file = "../../../etc/passwd" }' }, DATA, ":2: .*" },
  { "an_absolute_path", { before = 'local r = lw.timing.replay { file = "/etc/passwd" }' }, DATA,
    ":2: .*relative to its folder" },
  { "a_module_that_is_not_there", { before = 'require "no.such"' }, DATA, ":2: .*no/such.lua" },
  -- Lua itself
  { "a_syntax_error", { before = "local = 3" }, DATA, ":2: " },
  { "an_error_in_the_rig", { more = "error 'by hand'" }, DATA, ":9: by hand" },
  { "an_error_without_a_text", { more = "error {}" }, DATA, "." },
  { "a_call_of_nil", { more = "nosuch()" }, DATA, ":9: attempt to call a nil value" },
  { "no_rig_returned", { result = "" }, DATA, "a rig is wanted" },
  { "something_else_returned", { result = "return 7" }, DATA, "rig is wanted" },
  { "no_study_returned", { ending = "" }, DATA, "a study is wanted" },
  { "endless_recursion", { before = "local function f() return 1 + f() end f()" }, DATA,
    ":2: stack overflow" },
  { "an_endless_loop", { before = "while true do end" }, DATA, ":2: .*instructions" },
  { "an_endless_loop_that_catches_errors",
    { before = "while true do pcall(function() while true do end end) end" }, DATA, "instructions" },
  { "a_memory_bomb", { before = 'local s = ("x"):rep(1 << 32)' }, DATA, "memory" },
  { "a_finalizer", { before = "setmetatable({}, { __gc = function() end })" }, DATA, ":2: .*__gc" },
  { "the_operating_system", { before = "os.execute 'true'" }, DATA, ":2: .*'os'" },
  { "files_of_the_machine", { before = "io.open 'x'" }, DATA, ":2: .*'io'" },
  { "bytecode", { before = "assert(load(string.char(27) .. 'Lua'))" }, DATA, ":2: .*binary chunk" },
  { "dumping_code", { before = "string.dump(print)" }, DATA, ":2: .*'dump'" },
  { "random_without_an_address", { before = "math.random()" }, DATA, ":2: .*addressed" },
  -- laws in Lua
  { "an_upvalue_assigned_in_a_law", { before = "local n = 0", law = "lw.law.own { state = {}, " ..
    "step = function(wanted, measured) n = n + 1 return 0 end }" }, DATA, ":8: .*n" },
  { "a_global_assigned_in_a_law", { law = "lw.law.own { state = {}, " ..
    "step = function(wanted, measured) counter = 1 return 0 end }" }, DATA, ":8: .*counter" },
  { "too_few_values_from_a_law", { law = "lw.law.own { state = { s = 0 }, " ..
    "step = function(wanted, measured, s) return 0 end }" }, DATA, ":8: .*" },
  { "a_text_from_a_law", { law = "lw.law.own { state = {}, " ..
    "step = function(wanted, measured) return 'x' end }" }, DATA, ":8: .*" },
  { "an_error_in_a_law", { law = "lw.law.own { state = {}, " ..
    "step = function(wanted, measured) error 'by hand' end }" }, DATA, ":8: by hand" },
  { "a_state_the_step_does_not_take", { law = "lw.law.own { state = { s = 0 }, " ..
    "step = function(wanted, measured) return 0 end }" }, DATA, ":8: .*s" },
  -- what is asked of a run
  { "a_requirement_without_a_limit",
    { requirement = 'study:requirement { "overshoot", of = "coil.current", level = 2 }' }, DATA,
    ':13: requirement "overshoot": state one of at_most, at_least and at_most_per_hour' },
  { "an_unknown_metric",
    { requirement = 'study:requirement { "x", "overshot", of = "coil.current", at_most = 1 }' }, DATA,
    ':13: requirement "x": no metric is called "overshot"; nearest "overshoot"' },
  { "a_metric_without_a_level",
    { requirement = 'study:requirement { "overshoot", of = "coil.current", at_most = 1 }' }, DATA,
    ':13: metric "overshoot": level or against is missing' },
  { "a_metric_of_nothing",
    { requirement = 'study:requirement { "maximum", of = "coil.x", at_most = 1 }' }, DATA,
    ':13: metric "maximum": of: no signal "coil.x"' },
  { "settling_against_noise", { more = 'rig:source { "n", lw.source.noise { deviation = 1, ' ..
    'every = "1 ms" } }',
    requirement = 'study:requirement { "settling time", of = "coil.current", against = "n", ' ..
    "at_most = 1 }" }, DATA, ':13: metric "settling time": level is missing' },
  { "a_window_that_ends_before_it_begins",
    { requirement = 'study:requirement { "maximum", of = "coil.current", from = "2 ms", ' ..
    '["until"] = "1 ms", at_most = 1 }' }, DATA, ':13: metric "maximum": from' },
  { "a_metric_of_no_records", { requirement = 'study:requirement { "x", at_most = 1, ' ..
    "compute = function() return 1 end }" }, DATA, ':13: requirement "x": of is missing' },
  { "a_metric_of_unknown_records", { requirement = 'study:requirement { "x", of = "curent", ' ..
    "at_most = 1, compute = function() return 1 end }" }, DATA, ':13: metric "x": .*curent' },
  { "a_metric_that_computes_text", { requirement = 'study:requirement { "x", of = "current", ' ..
    "at_most = 1, compute = function() return 'high' end }" }, DATA, 'compute returned a string' },
  { "a_mask_of_one_corner", { requirement = 'study:requirement { "mask violation", at_most = 0, ' ..
    'of = "coil.current", mask = { { 0, -1, 1 } } }' }, DATA, ':13: metric .*mask has 1 corners' },
  { "measured_data_without_a_file", { requirement = 'study:requirement { "fit", at_least = 1, ' ..
    'of = "coil.current", measured = lw.measured { "none.csv", time = 1, value = 2 } }' }, DATA,
    ':13: .*none.csv' },
  { "a_file_outside_the_folder", { requirement = 'study:requirement { "fit", at_least = 1, ' ..
    'of = "coil.current", measured = lw.measured { "../../x.csv", time = 1, value = 2 } }' }, DATA,
    ':13: .*x.csv' },
  { "a_fit_of_an_unknown_kind", { requirement = 'lw.plant.fit { measured = lw.measured { ' ..
    'time = { 0, 1, 2 }, value = { 0, 1, 2 } }, kind = "first ordr", input = 1 }' }, DATA,
    ':13: plant fit: kind is "first ordr".*first order' },
  { "no_length", { study = "lw.study { build }" }, DATA, ":12: study: lasts is missing" },
  { "a_length_of_zero", { study = "lw.study { build, lasts = 0 }" }, DATA, ":12: study: lasts is 0" },
  { "half_a_run", { study = 'lw.study { build, lasts = "1 ms", runs = 1.5 }' }, DATA,
    ":12: study: runs is 1.5" },
  { "an_unknown_field_of_a_study", { study = 'lw.study { build, last = "1 ms" }' }, DATA,
    ':12: study: no field "last"; nearest "lasts"' },
  { "a_study_without_a_function", { study = 'lw.study { 7, lasts = "1 ms" }' }, DATA, ":12: study: " },
}

-- ---- running

local function write(path, text)
  local file = assert(io.open(path, "wb"))
  file:write(text)
  file:close()
end

local function run(arguments)
  local out, err = folder .. "/out", folder .. "/err"
  local _, _, code = os.execute(("%s %s >%s 2>%s"):format(program, arguments, out, err))
  local function read(path)
    local file = assert(io.open(path, "rb"))
    local text = file:read "a"
    file:close()
    return text
  end
  return code, read(out), read(err)
end

local function check(name, ok, why)
  if ok then
    passed = passed + 1
  else
    failed = failed + 1
    print(("FAILED %s: %s"):format(name, why))
  end
end

local function check_case(name, file, code, pattern)
  local got, out, err = run(("run %s --out %s/results"):format(file, folder))
  local lines = select(2, err:gsub("\n", "\n"))
  local where = pattern:sub(1, 1) == ":" and "^latewood: [^\n]*" .. file:match("[^/]+$"):gsub("%p",
    "%%%0") .. pattern or "^latewood: [^\n]*" .. pattern
  local left = io.open(folder .. "/results/result.json")
  if left then left:close() end
  check(name, got == code and lines == 1 and err:find(where) and out == "" and not left,
    ("exit code %s, message:\n  %s"):format(got, err))
end

os.execute(("rm -rf '%s' && mkdir -p '%s'"):format(folder, folder))
write(folder .. "/bad.txt", "1\ntwo\n")

for _, case in ipairs(cases) do
  local file = folder .. "/" .. case[1] .. ".lua"
  write(file, text_of(case[2]))
  check_case(case[1], file, case[3], case[4])
end

-- The sound study itself runs, so that each case fails for its own reason.
write(folder .. "/sound.lua", text_of {})
local code = run(("run %s/sound.lua --out %s/fine"):format(folder, folder))
check("the_sound_study_is_met", code == 0, code)

-- Not text at all.
check_case("a_folder_for_a_study", folder, DATA, "is a folder; a file is wanted")
check_case("no_such_study", folder .. "/none.lua", 66, "no such file")
write(folder .. "/latin1.lua", "-- caf\xe9\nreturn 1\n")
check_case("a_study_that_is_not_utf8", folder .. "/latin1.lua", DATA, "is not UTF%-8 text")
write(folder .. "/code.lua", string.dump(function() return 1 end))
check_case("a_compiled_study", folder .. "/code.lua", DATA, ".")

-- On the command line.
local function check_usage(name, arguments, exit_code, pattern)
  local got, out, err = run(arguments)
  check(name, got == exit_code and out == "" and err:find(pattern),
    ("exit code %s, message:\n  %s"):format(got, err))
end
local sound_file = folder .. "/sound.lua"
check_usage("an_unknown_command", "rum " .. sound_file, 64, 'no command "rum"; nearest "run"')
check_usage("an_unknown_option", "run --jsn " .. sound_file, 64, "no option %-%-jsn; nearest %-%-json")
check_usage("an_option_without_its_value", "run " .. sound_file .. " --runs", 64, "needs a value")
check_usage("runs_that_are_no_number", "run --runs 1.5 " .. sound_file, 64, "%-%-runs is \"1.5\"")
check_usage("a_parameter_that_is_not_known", "run " .. sound_file .. " gian=2", DATA,
  'no parameter "gian"; nearest "gain"')
check_usage("a_parameter_set_twice", "run " .. sound_file .. " gain=2 gain=3", 64, "set twice")
check_usage("an_argument_too_many", "run " .. sound_file .. " other.lua", 64, "one argument too many")
check_usage("a_folder_that_cannot_be_made", ("run %s --out %s/bad.txt/x"):format(sound_file, folder),
  73, "the folder cannot be made")

os.execute(("rm -rf '%s'"):format(folder))
print(("%d passed, %d failed"):format(passed, failed))
os.exit(failed == 0)
