-- Measured signals, what is said of runs against them, plants fitted to them, and metrics of a
-- study's own.

local harness = require "harness"
local lw = require "latewood"
local figure = require "latewood.figure"
local measured = require "latewood.measured"
local own_metric = require "latewood.own_metric"
local trial = require "latewood.trial"
local words = require "latewood.words"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises

local folder = os.getenv "TMPDIR" or "/tmp"

-- A file with this text; its name.
local function file_of(name, text)
  local path = folder .. "/" .. name
  local f = assert(io.open(path, "w"))
  f:write(text)
  f:close()
  return path
end

-- First order of gain 2 and 2 ms behind a step at 3 ms; sampled each millisecond.
local function axis(p)
  local rig = lw.rig "axis of the mount"
  rig:plant { "axis", lw.plant.first_order { gain = 2, time_constant = p.T } }
  rig:source { "push", lw.source.step { at = "3 ms", to = 1 } }
  rig:connect { "push", to = "axis.in" }
  rig:adc { "speed", of = "axis.out", every = "1 ms" }
  return rig
end

local function response(t)
  return t > 3e-3 and 2 * (1 - lw.math.exp(-(t - 3e-3) / 2e-3)) or 0
end

-- The exact response on a grid that fits no clock of the rig, with an error of a stated size.
local function data_of(size, shift)
  local time, value = {}, {}
  for i = 1, 150 do
    time[i] = i * 0.13e-3
    value[i] = response(time[i] - (shift or 0)) + (size or 0) * (i % 2 == 0 and 1 or -1)
  end
  return lw.measured { time = time, value = value, unit = "rad/s" }
end

local function study_of(lasts)
  return lw.study { axis, lasts = lasts or "20 ms", given = { T = "2 ms" } }
end

local function run(study, options)
  return assert(study:execute({}, options or {}))
end

-- ---- reading

local function test_reading()
  test("columns_are_found_by_name_number_and_none", function()
    local path = file_of("plain.csv", "# invented\nt,speed,current\n0,1,5\n0.5,2,6\n1.5,4,7\n")
    local m = lw.measured { path, time = "t", value = "current" }
    harness.same_list(m.time, { 0, 0.5, 1.5 })
    harness.same_list(m.value, { 5, 6, 7 })
    m = lw.measured { path, time = 1, value = 2, scale = 10, shift = "250 ms", from = 0.4 }
    harness.same_list(m.time, { 0.75, 1.75 })
    harness.same_list(m.value, { 20, 40 })
    m = lw.measured { path, every = "2 ms", value = "speed" }
    harness.same_list(m.time, { 0, 0.002, 0.004 })
  end)

  test("decimal_commas_units_and_separators_are_read", function()
    local path = file_of("comma.csv", "Zeit [ms];v\n-1,5;0,25\n0;1e-1\n2,5;-3\n")
    local m = lw.measured { path, time = 1, value = "v", decimal = ",", time_unit = "ms" }
    near(m.time[1], -1.5e-3, 1e-15)
    harness.same_list(m.value, { 0.25, 0.1, -3 })
    m = lw.measured { file_of("units.csv", "1 ms\t20 mA\n3 ms\t1.5 A\n"), time = 1, value = 2,
      separator = "tab" }
    near(m.time[2], 3e-3, 1e-15)
    harness.same_list(m.value, { 0.02, 1.5 })
    m = lw.measured { file_of("quoted.csv", '"t","v"\n"0,5","1,25"\n"1,5","2"\n'), time = "t",
      value = "v", decimal = ",", separator = "," }
    harness.same_list(m.value, { 1.25, 2 })
  end)

  test("between_rows_lie_straight_lines", function()
    local m = lw.measured { time = { 0, 1, 3 }, value = { 0, 2, 6 } }
    equal(m:at(0.5), 1)
    equal(m:at(2), 4)
    equal(m:at(3), 6)
    equal(m:at(3.1), nil)
    equal(m:shifted("1 s"):at(1.5), 1)
    equal(m:at(0.5), 1)
  end)

  test("what_is_no_measured_signal_is_refused", function()
    local good = file_of("good.csv", "t,v\n0,1\n1,2\n")
    raises(function() lw.measured { good, time = "t", value = "w" } end, "has no column \"w\"")
    raises(function() lw.measured { good, time = "t" } end, "value is missing")
    raises(function() lw.measured { good, value = "v" } end, "state one of time")
    raises(function() lw.measured { good, time = "t", value = "v", every = 1 } end,
      "state one of time")
    raises(function() lw.measured { good, time = "t", value = "v", tim = 1 } end,
      "nearest \"time\"")
    raises(function() lw.measured { good, time = "t", value = "v", decimal = "." , separator = "|" }
      end, "separator is \"|\"")
    raises(function() lw.measured { good, time = "t", value = "v", from = 5 } end, "0 rows")
    raises(function() lw.measured { good, time = "t", value = "v", time_unit = "A" } end, "A")
    local back = file_of("back.csv", "0,1\n2,1\n1,1\n")
    raises(function() lw.measured { back, time = 1, value = 2 } end,
      "row 3: its time is 1 s after 2 s")
    raises(function() lw.measured { file_of("text.csv", "t,v\n0,1\n1,high\n"), time = 1, value = 2 }
      end, "text.csv:3: column 2 is \"high\"")
    raises(function() lw.measured { folder .. "/no such file.csv", time = 1, value = 2 } end,
      "No such file")
    raises(function() lw.measured { time = { 0, 1 }, value = { 1 } } end,
      "time has 2 numbers and value 1")
    raises(function() lw.measured { time = { 0, 1 }, value = { 1, 0 / 0 } } end, "measured")
    raises(function() lw.measured "x.csv" end, "a table is wanted")
  end)
end

-- ---- beside runs

local function test_comparing()
  test("a_run_is_taken_at_the_instants_of_the_data", function()
    local s = study_of()
    s:metric { "peak", "residual peak", of = "axis.out", measured = data_of(0) }
    s:metric { "fit", of = "axis.out", measured = data_of(0) }
    local values = run(s).variants[1].values
    equal(values.peak[1] < 1e-12, true) -- the run is exact; lw.math is to 1e-15
    near(values.fit[1], 1, 1e-12)
  end)

  -- y = x + d: the residual is d everywhere; the fit follows its formula.
  test("residual_and_fit_have_their_closed_forms", function()
    local s, d = study_of(), data_of(0.01)
    s:requirement { "rms", "residual rms", of = "axis.out", measured = d, at_most = 0.0101 }
    s:requirement { "fit", of = "axis.out", measured = d, at_least = "98 %" }
    local result = run(s)
    near(result.variants[1].values.rms[1], 0.01, 1e-10)
    local mean, square = 0, 0
    for _, v in ipairs(d.value) do mean = mean + v / d.n end
    for _, v in ipairs(d.value) do square = square + (v - mean) ^ 2 end
    near(result.variants[1].values.fit[1], 1 - 0.01 * (d.n / square) ^ 0.5, 1e-10)
    equal(result.verdict, "met")
  end)

  test("another_plant_fits_worse", function() -- the twin
    local s = lw.study { axis, lasts = "20 ms", given = { T = "4 ms" } }
    s:requirement { "fit", of = "axis.out", measured = data_of(0.01), at_least = "98 %" }
    equal(run(s).verdict, "not met")
  end)

  test("a_shift_moves_the_data", function()
    local s = study_of "21 ms"
    s:metric { "late", "residual peak", of = "axis.out", measured = data_of(0, -1e-3) }
    s:metric { "right", "residual peak", of = "axis.out", measured = data_of(0, -1e-3),
      shift = "1 ms" }
    local short = lw.measured { time = { 0.5, 1 }, value = { 0, 0 } }
    s:metric { "beyond", "residual peak", of = "axis.out", measured = short }
    local values = run(s).variants[1].values
    equal(values.late[1] > 0.5, true)
    equal(values.right[1] < 1e-12, true)
    equal(values.beyond[1] ~= values.beyond[1], true) -- rows after the end of the run
  end)

  test("data_are_aligned_with_a_run", function()
    local data = data_of(0.001, -0.7e-3)
    local record = axis { T = "2 ms" }:run { lasts = "20 ms",
      record = { { "axis.out", every = "5 us" } } }:record "axis.out"
    -- the least-squares shift of a curve that rises for 2 ms, from 150 rows off by 0.001: 1e-6 s
    near(measured.align(data, record, 2e-3), 0.7e-3, 3e-3)
  end)

  test("figures_show_data_residual_and_fit", function()
    local s = study_of()
    s:figure { "Laid over", of = "axis.out", measured = data_of(0.01), unit = "rad/s" }
    s:figure { "Aligned", of = "axis.out", measured = data_of(0.01, -0.7e-3), align = "2 ms" }
    local list = figure.all(s, run(s))
    for i, more in ipairs { "run: fit 98", "Measured data moved by 7" } do
      equal(list[i].text:find("measured less run", 1, true) ~= nil, true)
      equal(list[i].text:find("measured: measured", 1, true) ~= nil, true)
      equal(list[i].text:find(more, 1, true) ~= nil, true, more)
    end
  end)

  test("what_cannot_be_laid_over_is_refused", function()
    local s = study_of()
    local d = data_of(0)
    raises(function() s:figure { "a", of = "axis.out", measured = 3 } end, "measured is a number")
    raises(function() s:figure { "b", of = "axis.out", shift = 1 } end, "move measured data")
    raises(function() s:figure { "c", of = "axis.out", measured = d, shift = 5 } end, "0 rows")
    raises(function() s:figure { "d", of = "axis.out", measured = d, align = 0 } end, "align is 0")
    raises(function() s:figure { "e", of = "axis.out", fit = {} } end, "state one of")
    raises(function() s:figure { "f", fit = {} } end, "what lw.plant.fit gives")
    raises(function() s:metric { "g", "overshoot", of = "axis.out", measured = d } end,
      "there are fit, residual rms, residual peak")
    raises(function() s:metric { "h", "fit", of = "axis.out", measured = {} } end,
      "what lw.measured gives")
    raises(function() s:metric { "i", "fit", of = "axis.out", measured = d, shift = "-5 ms" } end,
      "before the run begins")
    raises(function() s:metric { "j", "fit", of = "axis.out", measured = d, align = 1 } end,
      "no field \"align\"")
  end)
end

-- ---- fitted plants

local function test_fitting()
  test("a_fitted_plant_runs_like_the_measured_one", function()
    local f = assert(lw.plant.fit { measured = data_of(0), kind = "first order", input = 1,
      at = "3 ms" })
    near(f.parameters.gain, 2, 1e-6)
    near(f.parameters.time_constant, 2e-3, 1e-6)
    equal(f.parameters.delay, nil)
    near(f.fit, 1, 1e-6)
    equal(#f.residual, 150)
    local rig = lw.rig "fitted"
    rig:plant { "axis", f.plant }
    rig:source { "push", lw.source.step { at = "3 ms", to = 1 } }
    rig:connect { "push", to = "axis.in" }
    near(rig:run { lasts = "9 ms" }:value "axis.out", response(9e-3), 1e-5) -- six digits
  end)

  test("a_figure_shows_the_fit", function()
    local s = study_of()
    local f = assert(lw.plant.fit { measured = data_of(0.02), kind = "first order with delay",
      input = 1, at = "2 ms" })
    near(f.parameters.delay, 1e-3, 0.1)
    s:figure { "Fitted", fit = f, unit = "rad/s" }
    local text = figure.all(s, run(s))[1].text
    equal(text:find("time constant", 1, true) ~= nil, true)
    equal(text:find("standard error", 1, true) ~= nil, true)
    equal(text:find("measured less model", 1, true) ~= nil, true)
  end)

  test("what_the_data_do_not_determine_is_no_plant", function()
    local line = lw.measured { time = { 0, 1, 2, 3, 4, 5 }, value = { 0, 1, 2, 3, 4, 5 } }
    local plant, message, status = lw.plant.fit { measured = line, kind = "first order", input = 1 }
    equal(plant, nil)
    equal(status, "LW_ERR_FIT")
    equal(message:find("first order", 1, true) ~= nil, true)
    raises(function() lw.plant.fit { measured = line, kind = "third order", input = 1 } end,
      "third order")
    raises(function() lw.plant.fit { measured = line, kind = "integrator" } end, "input is missing")
    raises(function() lw.plant.fit { kind = "integrator", input = 1 } end, "measured is missing")
    raises(function() lw.plant.fit { measured = line, kind = "integrator", input = 0 } end,
      "input is 0")
    raises(function() lw.plant.fit { measured = line, kind = "integrator", input = 1, at = 9 } end,
      "0 rows after the step")
  end)
end

-- ---- metrics of a study's own

local function sum_of(record)
  local sum = 0
  for _, v in ipairs(record.value) do sum = sum + v end
  return sum
end

local function test_own()
  test("a_metric_may_be_a_function_of_records", function()
    local s = study_of()
    s:metric { "sum", of = "speed", compute = sum_of }
    s:metric { "both", of = { "speed", { "axis.out", at = { "4 ms", "5 ms" } } }, unit = "rad/s",
      compute = function(adc, out) return #adc.value + out.value[2] end }
    s:metric { "none", of = "speed", compute = function() end }
    s:metric { "largest", "maximum", of = "axis.out" }
    local values, sum = run(s).variants[1].values, 0
    for k = 0, 20 do sum = sum + response(k * 1e-3) end
    near(values.sum[1], sum, 1e-12)
    near(values.both[1], 21 + response(5e-3), 1e-12)
    equal(values.none[1] ~= values.none[1], true)
    near(values.largest[1], response(20e-3), 1e-12)
  end)

  test("its_records_change_nothing_else", function()
    local bare, observed = study_of(), study_of()
    bare:metric { "rms", of = "axis.out" }
    observed:metric { "sum", of = "speed", compute = sum_of }
    observed:metric { "rms", of = "axis.out" }
    equal(run(bare).variants[1].values.rms[1], run(observed).variants[1].values.rms[1])
  end)

  test("requirements_may_ask_for_it", function()
    for limit, verdict in pairs { ["1 A"] = "not met", ["100 A"] = "met" } do
      local s = study_of()
      s:requirement { "sum", of = "speed", compute = sum_of, unit = "A", at_most = limit }
      equal(run(s).verdict, verdict)
    end
    equal(words.metric(words.own_kind "A", 2.5), "2.5 A")
    equal(words.metric(words.own_kind "%", 0.025), "2.5 %")
    equal(words.metric(words.own_kind "s", 0.025), "25 ms")
    equal(words.metric(words.own_kind "", 0.025), "0.025")
  end)

  test("rows_of_a_batch_hold_all_metrics_in_order", function()
    local s = study_of()
    s:metric { "sum", of = "speed", compute = sum_of }
    s:metric { "largest", "maximum", of = "axis.out" }
    s:metric { "rows", of = "speed", compute = function(adc) return #adc.value end }
    local rig = axis { T = "2 ms" }
    local started = rig:start { lasts = "20 ms", metrics = own_metric.engine(s),
      record = own_metric.records(s) }
    for k = 0, 2 do
      local row = table.pack(own_metric.row(s, started, table.pack(started:row(k))))
      equal(row.n, 6)
      equal(row[1], 0)
      near(row[4], run(s).variants[1].values.sum[1], 0)
      near(row[5], response(20e-3), 1e-12)
      equal(row[6], 21)
    end
  end)

  test("what_is_no_metric_is_refused", function()
    local s = study_of()
    local f = function() return 1 end
    raises(function() s:metric { "a", compute = f } end, "of is missing")
    raises(function() s:metric { "b", of = {}, compute = f } end, "of is a table")
    raises(function() s:metric { "c", of = { 3 }, compute = f } end, "entry 1 names nothing")
    raises(function() s:metric { "d", "overshoot", of = "speed", compute = f } end, "one is wanted")
    raises(function() s:metric { "e", of = "speed", compute = 3 } end, "compute is a number")
    raises(function() s:metric { "f", of = "speed", compute = f, uni = "A" } end,
      "nearest \"unit\"")
    raises(function() s:metric { "g", of = "speed", compute = f, unit = 3 } end, "unit is 3")
    s:metric { "h", of = "speed", compute = function() return "much" end }
    raises(function() run(s) end, "metric \"h\": compute returned a string")
    local other = study_of()
    other:metric { "i", of = "sped", compute = f }
    raises(function() run(other) end, "sped")
  end)

  test("describe_names_it", function()
    local s = study_of()
    s:metric { "sum", of = "speed", compute = sum_of, unit = "A" }
    equal(own_metric.describe(s)[1],
      'metric "sum": own metric in A, of "speed", computed after each run')
    equal(trial.undefined "own metric", "undefined")
  end)
end

test_reading()
test_comparing()
test_fitting()
test_own()
harness.finish()
