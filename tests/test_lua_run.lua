-- Rigs and their runs from Lua: messages with lines, latencies, records, metrics, endings.

local harness = require "harness"
local coil = require "coil"
local lw = require "latewood"
local test, equal, near, raises = harness.test, harness.equal, harness.near, harness.raises
local mount, refuses = coil.mount, coil.refuses

local function test_rigs()
  test("messages_of_a_rig_begin_with_the_line_once", function()
    local message = refuses('local rig = lw.rig "r"\nrig:adc { "current", of = "x", ' ..
      'every = "50 us", bits = 99, range = { -1, 1 } }',
      'mount.lua:3: adc "current": bits is 99; permitted')
    equal(select(2, message:gsub("mount.lua", "")), 1)
  end)

  test("what_is_found_when_frozen_has_the_line_of_the_thing", function()
    local message = refuses('local rig = lw.rig "r"\nrig:adc { "current", of = "axis.curent", ' ..
      'every = 1 }\nrig:run { lasts = 1 }', 'mount.lua:3: adc "current"', "axis.curent")
    equal(select(2, message:gsub("mount.lua", "")), 1)
    refuses('local rig = lw.rig "r"\nrig:run { lasts = 1, metrics = { { "maximum", of = "x" } } }',
      "mount.lua:3: ", "maximum")
  end)

  test("names_are_unique_and_stated", function()
    refuses('lw.rig("r"):value { "v" }:value { "v" }', "mount.lua:2: value", "v", "taken")
    refuses('lw.rig("r"):value {}', "mount.lua:2: value: its name is missing")
    refuses('lw.rig("r"):value { 5 }', "its name (the first element) is 5")
    refuses('lw.rig()', "rig: its name is nil")
    refuses('lw.rig("r"):plant { "p", 5 }', "its second element is 5; a plant is wanted")
    refuses('lw.rig("r"):source { "p" }', "its second element is nil; a source is wanted")
  end)

  test("shares_of_a_period_need_a_period", function()
    local rig = lw.rig "r"
    rig:source { "x", lw.source.constant(1) }
    rig:adc { "a", of = "x", every = "20 kHz", offset = "37 %", takes = "10 %" }
    rig:dac { "d", latch = "a", phase = { "0 %", "50 %" } }
    rig:dac { "e", latch = "50 us", phase = "50 %", missed = "zero" }
    rig:dac { "f", missed = 3, slew = "5 V/s", dead_band = 0.1, start = 1 }
    rig:adc { "b", of = { "x", "x" }, skew = { 0, "1 us" }, after = "a", takes = "1 us" }
    rig:freeze { lasts = "1 ms" }
    raises(function() rig:dac { "g", phase = "50 %" } end, "phase is \"50 %\"", "no period")
    raises(function() rig:adc { "h", of = "x", after = "a", offset = "5 %" } end, "offset")
  end)

  test("loops_name_what_is_missing_or_too_much", function()
    local start = 'local rig = lw.rig "r"\nrig:value { "v" }\n'
    refuses(start .. 'rig:loop { "c", output = "v" }', 'mount.lua:4: loop "c": law is missing')
    refuses(start .. 'rig:loop { "c", law = lw.law.p { kp = 1 }, output = "v", wanted = 1 }',
      "measured")
    refuses(start .. 'rig:loop { "c", law = lw.law.p { kp = 1 }, wanted = 1, measured = 2 }',
      "output is missing")
    refuses(start .. 'rig:loop { "c", law = lw.law.p { kp = 1 }, wanted = 1, mesured = 2, ' ..
      'output = "v" }', 'no field "mesured"; nearest "measured"')
    refuses(start .. 'rig:loop { "c", law = lw.law.p { kp = 1 }, wanted = {}, measured = true, ' ..
      'output = "v" }', "measured is true; a signal or a number")
    refuses(start .. 'rig:loop { "c", law = lw.law.p { kp = 1 }, wanted = 1, measured = 2, ' ..
      'output = { "v", "v", "v" } }', "output has 3 names; the law has 2")
    refuses(start .. 'rig:loop { "c", law = lw.law.own { step = function(latency) ' ..
      'return latency end }, output = "v" }', 'an input "latency"')
  end)

  test("numbered_inputs_take_a_list", function()
    local rig = lw.rig "r"
    rig:source { "x", lw.source.constant(3) }:source { "y", lw.source.constant(5) }
    rig:adc { "a", of = { "x", "y" }, every = "1 ms" }:value { "v" }
    rig:loop { "c", law = lw.law.state_feedback { K = { { 1, 10 } }, N = 100 }, wanted = 1,
      measured = { "a.1", "a.2" }, output = "v" }
    local run = rig:run { lasts = "2 ms" }
    equal(run:value "v", 100 - 3 - 50)
  end)

  test("latencies_come_in_every_form", function()
    local function written(latency, more)
      local rig = lw.rig "r"
      rig:source { "x", lw.source.constant(1) }:adc { "a", of = "x", every = "1 ms" }
      rig:value { "v" }
      local loop = { "c", law = lw.law.p { kp = 1 }, wanted = 0, measured = "a", output = "v",
        latency = latency }
      for k, v in pairs(more or {}) do loop[k] = v end
      rig:loop(loop)
      return rig:run { lasts = "20 ms", record = { "c" } }:record("c").latency
    end
    equal(written(nil)[3], 0)
    equal(written(0)[3], 0)
    near(written(1.5e-4)[3], 1.5e-4, 1e-12)
    near(written("12 us")[3], 12e-6, 1e-12)
    near(written("0.37 samples")[3], 0.37e-3, 1e-12)
    near(written("1 sample")[3], 1e-3, 1e-12)
    near(written("37 %")[3], 0.37e-3, 1e-12)
    near(written(lw.timing.constant "5 us")[3], 5e-6, 1e-12)
    near(written({ lw.timing.constant(0.25), per = "sample" })[3], 0.25e-3, 1e-12)
    local cycled = written { "10 us", "1.5 samples", "lost" }
    near(cycled[1], 1e-5, 1e-12)
    near(cycled[2], 1.5e-3, 1e-12)
    near(cycled[4], 1e-5, 1e-12)
    written(lw.timing.uniform("1 us", "2 ms"), { arrival = "newest", lost = "10 %", missed = 0.1,
      in_flight = 8 })
    raises(function() written "7 V" end, "latency:", "7 V")
    raises(function() written(true) end, "latency is true")
    raises(function() written {} end, "latency is an empty list")
    raises(function() written({ lw.timing.constant(1), per = "period" }) end,
      'per is "period"; permitted are "second", "sample"')
  end)
end

local function test_runs()
  local options = { inductance = 0.01, period = "100 us", wanted = 2, law = nil }

  test("the_ideal_coil_loop_obeys_its_recurrence", function()
    -- common practice, no source: i[k+1] = i[k] + p (r - i[k]) with p = kp T / L
    local kp, L, T, r = 25, 0.01, 1e-4, 2
    local run = coil.run { inductance = L, period = T, wanted = r, law = lw.law.p { kp = kp },
      lasts = "20 ms" }
    equal(run:status(), "done")
    local record = run:record "current"
    local i = 0
    equal(record.n, 201)
    for k = 1, record.n do
      -- some roundings a step, of values up to 2, over 200 steps
      near(record.value[k], i, 1e-13, r)
      i = i + kp * T / L * (r - i)
    end
  end)

  test("a_latch_on_the_adcs_clock_delays_the_coil_by_one_sample", function()
    -- common practice, no source: i[k+1] = i[k] + p (r - i[k-1])
    local kp, L, T, r = 25, 0.01, 1e-4, 2
    local record = coil.run { inductance = L, period = T, latch = "current", wanted = r,
      latency = "10 us", law = lw.law.p { kp = kp }, lasts = "20 ms" }:record "current"
    local i, before = 0, nil
    for k = 1, record.n do
      near(record.value[k], i, 1e-13, r)
      local next_i = i + kp * T / L * (before and r - before or 0)
      before, i = i, next_i
    end
  end)

  test("records_are_columns_by_name_and_number", function()
    options.law = lw.law.p { kp = 1 }
    local rig = coil.loop(options)
    local run = rig:run { lasts = "1 ms", record = { "current", { "coil.current", every = "250 us",
      from = "250 us", to = "900 us" }, { "bridge", at = { 0, "500 us" } } } }
    local events = run:record "current"
    harness.same_list(events.columns, { "sample", "time", "input", "value", "code" })
    equal(events[4], events.value)
    local record = run:record "coil.current"
    harness.same_list(record.columns, { "time", "value" })
    equal(record.n, 3)
    near(record.time[1], 250e-6, 1e-15)
    equal(run:record "bridge".n, 2)
    raises(function() run:record "bridg" end, 'no record "bridg" in this run; nearest "bridge"')
  end)

  test("texts_of_a_run_are_csv_and_json", function()
    options.law = lw.law.p { kp = 1 }
    local run = coil.loop(options):run { lasts = "100 us", seed = 5, run = 6,
      record = { { "coil.current", at = { 0, "100 us" } } },
      metrics = { { "top", "maximum", of = "coil.current" },
        { "rise time", of = "coil.current", level = 2 } } }
    local lines = {}
    for line in run:csv("coil.current"):gmatch "[^\n]+" do lines[#lines + 1] = line end
    equal(#lines, 3)
    equal(lines[1], "time,value")
    equal(lines[2], "0,0")
    local json = run:json()
    equal(json:sub(1, 55), '{"format": "latewood run", "version": 1, "seed": 5, "ru')
    equal(json:find('"run": 6', 1, true) ~= nil, true)
    equal(json:find('"rise time": null', 1, true) ~= nil, true, json)
    equal(json:find('"status": "done", "message": null', 1, true) ~= nil, true)
  end)

  test("metrics_stand_by_name_when_the_run_is_finished", function()
    options.law = lw.law.p { kp = 25 }
    local rig = coil.loop(options)
    local metrics = { { "overshoot", of = "coil.current", level = 2 },
      { "late", "settling time", of = "coil.current", level = "2 A", band = "5 %" },
      { "end", "final", of = "coil.current" } }
    local run = rig:run { lasts = "20 ms", metrics = metrics }
    equal(run:metric "overshoot", 0)
    near(run:metric "end", 2, 1e-9)
    equal(run:metrics().late, run:metric "late")
    raises(function() run:metric "end " end, 'nearest "end"')
    local begun = rig:start { lasts = "20 ms", metrics = metrics }
    raises(function() begun:metric "late" end, "run:finish()")
    equal(begun:advance("20 ms"):finish():metric "late", run:metric "late")
    raises(function() begun:advance "21 ms" end, "finished")
  end)

  test("observing_refuses_what_it_does_not_know", function()
    local start = 'local rig = lw.rig "r"\nrig:source { "x", lw.source.constant(1) }\n'
    refuses(start .. 'rig:run { lasts = 1, metrics = { { "overshot", of = "x" } } }',
      'mount.lua:4: metric "overshot": no kind of metric "overshot"; nearest "overshoot"')
    refuses(start .. 'rig:run { lasts = 1, metrics = { { "m", "maximum", off = "x" } } }',
      'metric "m": no field "off"; nearest "of"')
    refuses(start .. 'rig:run { lasts = 1, record = { { "x", every = 1, at = { 1 } } } }',
      "both every and at")
    refuses(start .. 'rig:run { lasts = 1, record = { 7 } }', "record[1]: it is 7")
    refuses(start .. 'rig:run { lasts = 1, records = {} }', 'no field "records"; nearest "record"')
    refuses(start .. 'rig:run {}', "mount.lua:4: run: lasts is missing")
    refuses(start .. 'rig:run { lasts = "5 V" }', "run: lasts:", "5 V")
    refuses(start .. 'rig:run { lasts = 1, seed = -1 }', "seed is -1; permitted 0 to")
    refuses(start .. 'rig:start { lasts = 1 }:value "y"', 'mount.lua:4: ', '"y"')
  end)

  test("advancing_in_pieces_gives_the_bytes_of_one_run", function()
    options.law = mount(coil.own_pi)
    local rig = coil.loop(options)
    local whole = rig:run { lasts = "10 ms" }
    local pieces = rig:start { lasts = "10 ms" }
    for k = 1, 40 do pieces:advance(k * 2.5e-4) end
    pieces:finish()
    equal(pieces:block() == whole:block(), true)
    equal(pieces:now(), 0.01)
    raises(function() whole:advance "20 ms" end, "finished")
    local one = rig:start { lasts = "10 ms" }
    one:advance "5 ms"
    raises(function() one:advance "4 ms" end, "past it")
    equal(one:instants() > 10, true)
  end)

  test("a_restarted_run_gives_the_bytes_of_a_new_one", function()
    local rig = lw.rig "r"
    rig:source { "n", lw.source.noise { deviation = 1, every = "1 ms" } }
    local run = rig:run { lasts = "10 ms", seed = 3, run = 1 }
    local block = run:block()
    local again = rig:run { lasts = "10 ms", seed = 3, run = 2 }
    equal(again:block() ~= block, true)
    again:restart { run = 1 }:advance "10 ms"
    again:finish()
    equal(again:block() == block, true)
  end)

  test("a_run_that_is_not_finite_tells_so", function()
    local rig = lw.rig "r"
    rig:plant { "p", lw.plant.state_space { A = { { 1e4 } }, B = { { 1 } }, C = { { 1 } },
      start = { 1e300 } } }
    rig:adc { "a", of = "p.out", every = "1 ms" }
    local status, message = rig:run { lasts = "10 ms" }:status()
    equal(status, "LW_ERR_NOT_FINITE")
    equal(#message > 5, true)
  end)

  test("a_rig_describes_itself_and_its_state", function()
    options.law = lw.law.p { kp = 1 }
    local rig = coil.loop(options)
    local lines = rig:describe()
    equal(lines[1]:find('rig "coil"', 1, true) ~= nil, true)
    equal(#lines > 4, true)
    local slices = rig:slices()
    local owners = {}
    for _, slice in ipairs(slices) do owners[slice.owner] = true end
    equal(owners.control, true)
    equal(math.type(slices[1].offset), "integer")
  end)

  test("what_is_closed_says_so", function()
    local rig = coil.loop { inductance = 1, period = "1 ms", wanted = 0, law = lw.law.p { kp = 1 } }
    local kept
    do
      local run <close> = rig:start { lasts = "1 ms" }
      kept = run
    end
    raises(function() kept:advance(1) end, "the run is closed")
    rig:close()
    rig:close()
    raises(function() rig:value { "v" } end, "the rig is closed")
  end)

  test("a_run_outlives_the_names_of_its_rig_and_law", function()
    local run
    do
      local rig = coil.loop { inductance = 1, period = "100 us", wanted = 1,
        law = mount(coil.own_pi) }
      run = rig:start { lasts = "10 ms" }
      rig:close()
    end
    harness.collect()
    equal(run:advance("10 ms"):finish():status(), "done")
  end)

  test("rigs_and_laws_that_refer_to_each_other_are_collected", function()
    if not collectgarbage then return end -- a study cannot ask for it
    local weak = setmetatable({}, { __mode = "k" })
    do
      local box = {}
      local law = lw.law.own { step = function(wanted, measured)
        return box.rig and wanted - measured or 0
      end }
      box.rig = coil.loop { inductance = 1, period = "100 us", wanted = 1, law = law }
      box.run = box.rig:run { lasts = "1 ms" }
      weak[box.rig] = true
    end
    harness.collect()
    harness.collect()
    equal(next(weak), nil)
  end)
end

harness.run_under_all_collectors(function()
  test_rigs()
  test_runs()
end)
harness.finish()
