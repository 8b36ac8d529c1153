-- Processors from Lua: tasks against loops with the same latency, records, overruns, precedence,
-- buses, drift, draining, the search over phases; what is refused and in which words.

local lw = require "latewood"
local harness = require "harness"
local test, equal, near = harness.test, harness.equal, harness.near

-- Parameters are invented: a winding of a mount's motor and its converters.
local function coil(latency, add)
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.winding { resistance = "0.5 ohm", inductance = "4 mH" } }
  rig:adc { "current", of = "coil.current", every = "100 us", bits = 12, range = { -8, 8 } }
  rig:dac { "bridge", to = "coil.voltage", range = { -24, 24 } }
  if latency then
    rig:loop { "control", law = lw.law.pi { kp = 10, ki = 2000 }, wanted = 2, measured = "current",
      output = "bridge", latency = latency }
  else
    rig:core { "mcu", clock = "100 MHz", urgent = "larger" }
    add(rig)
  end
  return rig
end

local function control(rig, more)
  local t = { "control", on = "mcu", priority = 3, released_by = "current",
    law = lw.law.pi { kp = 10, ki = 2000 }, wanted = 2, measured = "current", output = "bridge" }
  if more.every then t.released_by = nil end
  for k, v in pairs(more) do t[k] = v end
  rig:task(t)
end

local function traces(rig)
  return rig:run { lasts = "20 ms", seed = 3, record = { { "coil.current", every = "7 us" },
    "bridge", "control" } }
end

local function jobs(rig, lasts, ...)
  return rig:run { lasts = lasts, record = { ... } }
end

-- A core with tasks that compute nothing: { name, fields }.
local function bare(core, tasks)
  local rig = lw.rig "bare"
  core[1], core.urgent = "mcu", core.urgent or "smaller"
  rig:core(core)
  for _, t in ipairs(tasks) do
    t.on = "mcu"
    rig:task(t)
  end
  return rig
end

local function us(list)
  local out = {}
  for i, v in ipairs(list) do out[i] = v == v and math.floor(v * 1e6 + 0.5) or "none" end
  return table.concat(out, " ")
end

-- ---- a task is a loop whose latency comes of the processor

for _, takes in ipairs { "37 us", "3700 cycles", "100 us" } do
  test("a_task_alone_is_the_loop_of_that_latency_byte_for_byte_" .. takes:gsub(" ", "_"), function()
    local loop = traces(coil(takes:gsub("3700 cycles", "37 us")))
    local task = traces(coil(nil, function(rig) control(rig, { takes = takes }) end))
    equal(task:csv "coil.current", loop:csv "coil.current")
    equal(task:csv "bridge", loop:csv "bridge")
  end)
end

test("a_timing_of_execution_is_a_timing_of_latency", function()
  -- other draw streams: the latencies as drawn are given to the loop as a list
  local task = traces(coil(nil, function(rig)
    control(rig, { takes = lw.timing.uniform("10 us", "90 us") })
  end))
  local list, record = {}, task:record "control"
  for k = 1, record.n do list[k] = record.written[k] - record.sample[k] end
  for _ = 1, 3 do list[#list + 1] = "50 us" end
  local loop = traces(coil(list))
  local a, b = task:record "coil.current".value, loop:record "coil.current".value
  for k = 1, #a do near(a[k], b[k], 1e-11) end -- seconds as doubles lose part of a tick
end)

test("a_preempted_task_is_the_loop_whose_latencies_it_had", function()
  local task = traces(coil(nil, function(rig)
    control(rig, { takes = "30 us", priority = 1 })
    rig:task { "above", on = "mcu", priority = 2, every = "70 us", offset = "9 us",
      takes = "22 us" }
  end))
  local list, record, preempted = {}, task:record "control", 0
  for k = 1, record.n do
    list[k] = record.written[k] - record.sample[k]
    preempted = preempted + record.preemptions[k]
    equal(record.read[k], record.start[k])
  end
  equal(preempted > 20, true)
  -- a law reads at its start: where that is late the loop would read at the sample, the same value
  -- of the same adc; so only the instants of writes differ, and they are given
  for _ = 1, 3 do list[#list + 1] = "50 us" end
  local loop = traces(coil(list))
  local a, b = task:record "coil.current".value, loop:record "coil.current".value
  for k = 1, #a do near(a[k], b[k], 1e-11) end
end)

-- ---- what a record of a core says

test("stretches_of_a_core_add_up_to_the_work_of_its_jobs", function()
  local rig = bare({ context_switch = "2 us", release_cost = "1 us" },
    { { "a", priority = 1, every = "50 us", takes = "10 us" },
      { "b", priority = 2, every = "200 us", takes = "70 us" } })
  local run = jobs(rig, "2 ms", "mcu", "a", "b")
  local mcu, work, before = run:record "mcu", 0, 0
  for k = 1, mcu.n do
    equal(mcu.from[k] >= before - 1e-15, true)
    before = mcu["until"][k]
    if mcu.kind[k] == 0 then work = work + before - mcu.from[k] end
  end
  local executed = 0
  for _, name in ipairs { "a", "b" } do
    for _, v in ipairs(run:record(name).executed) do executed = executed + v end
  end
  near(work, executed, 1e-9)
  equal(us({ run:record "a".start[1], run:record "a".finish[1], run:record "b".start[1] }),
    "4 14 16")
end)

-- ---- overruns

local function overrun(fields)
  fields[1], fields.priority, fields.every = "t", 1, "10 us"
  -- job 1 takes 25 us, all others 4 us
  fields.takes = lw.timing.replay { values = { 4e-6, 25e-6, 4e-6, 4e-6, 4e-6, 4e-6 } }
  local run = jobs(bare({}, { fields }), "70 us", "t")
  local r = run:record "t"
  local how = {}
  for k = 1, r.n do how[k] = ("%d"):format(r.outcome[k]) end
  return us(r.ready) .. " / " .. us(r.finish) .. " / " .. table.concat(how)
end

test("a_queued_release_waits_and_further_ones_are_skipped", function()
  equal(overrun { overruns = "queue" }, "0 30 10 20 40 50 60 / 4 30 35 39 44 54 64 / 0100000")
end)

test("a_longer_queue_takes_more", function()
  equal(overrun { overruns = "queue", queue = 2 },
    "0 10 20 30 40 50 60 / 4 35 39 43 47 54 64 / 0000000")
end)

test("a_skipped_release_is_lost", function()
  equal(overrun { overruns = "skip" }, "0 20 30 10 40 50 60 / 4 20 30 35 44 54 64 / 0110000")
end)

test("an_aborted_job_ends_at_the_next_release", function()
  equal(overrun { overruns = "abort" }, "0 10 20 30 40 50 60 / 4 20 24 34 44 54 64 / 0200000")
end)

test("a_rephased_clock_goes_on_from_the_late_release", function()
  equal(overrun { overruns = "rephase" }, "0 10 35 45 55 65 / 4 35 39 49 59 69 / 000000")
end)

test("a_relative_delay_counts_from_the_finish", function()
  equal(overrun { delay = "relative" }, "0 14 49 63 / 4 39 53 67 / 0000")
end)

test("a_full_queue_ends_the_run_where_that_is_stated", function()
  local rig = bare({}, { { "t", priority = 1, every = "10 us", takes = "25 us",
    when_full = "end the run" } })
  local _, message = rig:run { lasts = "1 ms" }:status()
  equal(message, 'at 2e-05 s: "t": its queue of jobs is full')
end)

test("after_a_missed_job_a_dac_does_what_it_states", function()
  local rig = lw.rig "missed"
  rig:adc { "level", of = "tank.out", every = "10 us" }
  rig:plant { "tank", lw.plant.integrator { gain = 1 } }
  rig:dac { "valve", to = "tank.in", missed = "zero" }
  rig:core { "mcu", urgent = "larger" }
  rig:task { "control", on = "mcu", priority = 1, released_by = "level", overruns = "skip",
    takes = lw.timing.replay { values = { 3e-6, 14e-6, 3e-6 } }, law = lw.law.p { kp = 1 },
    wanted = 5, measured = "level", output = "valve" }
  local run = rig:run { lasts = "25 us", record = { "valve", "control" },
    metrics = { { "missed", of = "control" }, { "skipped jobs", of = "control" } } }
  equal(us(run:record "valve".time), "3 20 24")
  equal(run:record "valve".value[2], 0.0)
  equal(run:metric "missed", 2.0) -- one late, one skipped
  equal(run:metric "skipped jobs", 1.0)
end)

-- ---- policies

test("equal_deadlines_leave_the_core_to_whom_has_it", function()
  local run = jobs(bare({ policy = "earliest deadline first" },
    { { "late", every = "100 us", offset = "5 us", deadline = "20 us", takes = "5 us" },
      { "first", every = "100 us", deadline = "25 us", takes = "10 us" } }), "99 us", "late",
        "first")
  equal(us(run:record "first".finish) .. " " .. us(run:record "late".start), "10 10")
end)

test("a_cooperative_job_is_overtaken_at_its_yields_only", function()
  local tasks = { { "long", every = "1 ms", takes = "100 us", yields = { "50 %" } },
    { "short", every = "1 ms", offset = "10 us", takes = "5 us" } }
  local run = jobs(bare({ policy = "cooperative" }, tasks), "999 us", "long", "short")
  equal(us(run:record "short".start) .. " " .. us(run:record "long".finish), "50 105")
end)

test("a_table_gives_each_task_its_slots", function()
  local run = jobs(bare({ policy = "time-triggered table", cycle = "100 us",
      table = { { "a", at = 0, lasts = "30 us" }, { "b", at = "40 us", lasts = "50 us" } } },
    { { "a", takes = "20 us" }, { "b", takes = "70 us", overruns = "queue" } }), "300 us", "a",
      "b", "mcu")
  equal(us(run:record "a".finish), "20 120 220")
  equal(us(run:record "b".start) .. " / " .. us(run:record "b".finish), "40 160 / 160 280")
end)

test("an_interrupt_comes_above_a_job_that_nothing_else_preempts", function()
  local run = jobs(bare({ policy = "fixed priority without preemption" },
    { { "job", priority = 5, every = "1 ms", takes = "50 us" },
      { "other", priority = 1, every = "1 ms", offset = "10 us", takes = "5 us" },
      { "edge", interrupt = 1, every = "1 ms", offset = "20 us", takes = "2 us" } }),
    "999 us", "job", "other", "edge")
  equal(us { run:record "edge".start[1], run:record "job".finish[1], run:record "other".start[1] },
    "20 52 52")
end)

test("a_masked_section_holds_interrupts_off", function()
  local run = jobs(bare({},
    { { "job", priority = 5, every = "1 ms", takes = "50 us",
        masked = { { from = "10 us", to = "30 us" } } },
      { "edge", interrupt = 1, every = "1 ms", offset = "20 us", takes = "2 us" } }),
    "999 us", "job", "edge")
  equal(us { run:record "edge".start[1], run:record "job".finish[1] }, "30 52")
end)

-- ---- releases

test("a_finish_releases_the_next_task_of_a_chain_on_another_core", function()
  local rig = lw.rig "chain"
  rig:core { "one", urgent = "smaller" }
  rig:core { "two", urgent = "smaller" }
  rig:task { "first", on = "one", priority = 1, every = "100 us", takes = "30 us" }
  rig:task { "second", on = "two", priority = 1, released_by = "first", takes = "20 us" }
  local run = jobs(rig, "250 us", "first", "second")
  equal(us(run:record "second".start) .. " / " .. us(run:record "second".finish),
    "30 130 230 / 50 150 250")
end)

test("a_comparator_releases_an_interrupt_handler", function()
  local rig = lw.rig "trip"
  rig:plant { "ramp", lw.plant.integrator { gain = 1 } }
  rig:source { "push", lw.source.constant(2) }
  rig:connect { "push", to = "ramp.in" }
  rig:comparator { "over", of = "ramp.out", above = 1e-3 }
  rig:core { "mcu", urgent = "larger" }
  rig:task { "off", on = "mcu", interrupt = 1, released_by = "over", takes = "5 us" }
  local run = jobs(rig, "2 ms", "off") -- 2 t reaches 1e-3 at 500 us
  equal(us(run:record "off".ready) .. " / " .. us(run:record "off".finish), "500 / 505")
  local text = table.concat(rig:describe(), "\n")
  equal(text:find('released by "over" (an edge of the comparator)', 1, true) ~= nil, true)
end)

test("releases_are_rounded_up_to_the_timer_and_lateness_counts_from_the_clock", function()
  local rig = bare({ timer_tick = "50 us" }, { { "t", priority = 1, every = "80 us",
    takes = "1 us" } })
  local run = rig:run { lasts = "400 us", record = { "t" },
    metrics = { { "late", "release lateness maximum", of = "t" } } }
  equal(us(run:record "t".ready), "0 100 200 250 350")
  near(run:metric "late", 40e-6, 1e-15)
end)

test("a_fast_clock_has_more_releases_and_shorter_cycles", function()
  local rig = lw.rig "drift"
  rig:core { "slow", clock = "1 MHz", urgent = "smaller" }
  rig:core { "fast", clock = "1 MHz", urgent = "smaller", drift = "1000 ppm" }
  rig:task { "a", on = "slow", priority = 1, every = "100 us", takes = "10 cycles" }
  rig:task { "b", on = "fast", priority = 1, every = "100 us", takes = "10 cycles" }
  local run = jobs(rig, "1 s", "a", "b")
  equal(run:record "a".n, 10000)
  equal(run:record "b".n, 10010) -- 1.001 s of its own
  near(run:record "b".executed[1], 10e-6 / 1.001, 1e-7) -- whole picoseconds of 9.99 us
end)

test("logical_execution_time_writes_at_a_fixed_distance_whatever_the_schedule", function()
  local task = traces(coil(nil, function(rig) -- its own clock, in step with the adc
    control(rig, { takes = lw.timing.uniform("10 us", "60 us"), logical = "100 %",
      every = "100 us" })
  end))
  local loop = traces(coil "1 sample")
  equal(task:csv "coil.current", loop:csv "coil.current")
end)

test("reading_at_the_release_is_reading_before_what_delays_the_start", function()
  local function read(reads)
    local run = traces(coil(nil, function(rig)
      control(rig, { takes = "10 us", priority = 1, reads = reads })
      rig:task { "above", on = "mcu", priority = 2, every = "100 us", takes = "40 us" }
    end))
    return us { run:record "control".read[2], run:record "control".written[2] }
  end
  equal(read "release", "100 150")
  equal(read "start", "140 150")
  equal(read "50 %", "145 150")
  equal(read "2 us", "142 150")
end)

-- ---- buses

test("frames_are_sent_whole_and_the_smaller_number_goes_first", function()
  local rig = lw.rig "bus"
  rig:bus { "can", bits_per_second = 1e6 }
  -- CHECKS S-31 (R. Davis and others 2007): 135 bits with 8 bytes and 11 bits of identifier, 55
  -- with none; 160 with 29 bits
  rig:frame { "low", on = "can", priority = 9, bytes = 8, every = "1 ms" }
  rig:frame { "high", on = "can", priority = 1, bytes = 0, every = "1 ms", offset = "10 us" }
  rig:frame { "middle", on = "can", priority = 5, bytes = 8, identifier = 29, every = "1 ms",
    offset = "5 us" }
  local run = jobs(rig, "999 us", "low", "high", "middle")
  equal(us { run:record "low".finish[1], run:record "high".finish[1],
    run:record "middle".finish[1] },
    "135 190 350")
end)

test("a_lost_frame_leaves_the_value_as_it_was", function()
  local rig = lw.rig "loss"
  rig:source { "ramp", lw.source.ramp { slope = 1 } }
  rig:value { "there" }
  rig:bus { "can", bits_per_second = 1e6 }
  rig:frame { "f", on = "can", priority = 1, bits = 100, every = "1 ms", carries = "ramp",
    to = "there", lost = "30 %" }
  local run = rig:run { lasts = "1 s", record = { { "there", every = "1 ms", from = "0.5 ms" },
    "f" },
    metrics = { { "lost", of = "f" } } }
  local n, f = 0, run:record "f"
  for k = 1, f.n do n = n + (f.written[k] ~= f.written[k] and 1 or 0) end
  equal(run:metric "lost", n + 0.0)
  equal(n > 240 and n < 360, true) -- 300 of 1000 at a deviation of 14
  local there, seen = run:record "there".value, -1
  for k = 1, #there do
    if f.written[k] == f.written[k] then seen = f.read[k] end
    equal(there[k], math.max(seen, 0))
  end
end)

-- ---- runs

test("a_drained_run_releases_no_more_and_finishes_what_is_under_way", function()
  local rig = bare({}, { { "a", priority = 2, every = "100 us", takes = "70 us" },
    { "b", priority = 1, every = "100 us", offset = "50 us", takes = "20 us" } })
  local run = rig:start { lasts = "1 ms", record = { "a", "b" } }
  run:advance "251 us"
  run:drain()
  equal(us(run:record "a".finish) .. " / " .. us(run:record "b".finish), "90 190 290 / 70 170 270")
  near(run:now(), 290e-6, 1e-15)
end)

test("worst_phase_finds_the_instant_of_the_largest_number", function()
  local worst = lw.worst_phase { over = "1 ms", phases = 10, from = "2 ms", of = function(at)
    local rig = bare({ stalls = { { at = at, lasts = "100 us" } } },
      { { "t", priority = 1, every = "1 ms", takes = "30 us" } })
    return rig:run { lasts = "5 ms", metrics = { { "r", "response maximum",
      of = "t" } } }:metric "r"
  end }
  near(worst.value, 130e-6, 1e-12)
  near(worst.at, 2e-3, 1e-15)
  equal(#worst.values, 10)
end)

-- ---- what is refused

local refused = {
  { "an_unknown_core",
    'rig:task { "t", on = "mcv", priority = 1, every = 1, takes = 0 }',
    'task "t": on: no core "mcv"; nearest "mcu"' },
  { "an_unknown_resource",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, takes = 1, sections = { { "spo" } ' ..
    '} }',
    'task "t": sections: core "mcu" has no resource "spo"; nearest "spi"' },
  { "a_ring_of_releases",
    'rig:task { "t", on = "mcu", priority = 1, released_by = "u", takes = 0 } rig:task { ' ..
    '"u", on = "mcu", priority = 1, released_by = "t", takes = 0 }',
    'task "t": released_by: tasks release one another in a ring' },
  { "a_zero_period",
    'rig:task { "t", on = "mcu", priority = 1, every = 0, takes = 0 }',
    'task "t": every' },
  { "no_release",
    'rig:task { "t", on = "mcu", priority = 1, takes = 0 }',
    'task "t": nothing releases it: every, released_by or arrives is wanted' },
  { "two_releases",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, released_by = "u", takes = 0 }',
    'task "t": one of every, released_by and arrives is wanted' },
  { "an_unknown_trigger",
    'rig:task { "t", on = "mcu", priority = 1, released_by = "curent", takes = 0 }',
    'task "t": released_by: no .*"curent"' },
  { "no_priority",
    'rig:task { "t", on = "mcu", every = 1, takes = 0 }',
    'task "t": priority is missing' },
  { "no_direction",
    'rig:core { "m" } rig:task { "t", on = "m", priority = 1, every = 1, takes = 0 }',
    'core "m": urgent is missing: "larger" or "smaller"' },
  { "no_deadline",
    'rig:core { "m", policy = "earliest deadline first" } rig:task { "t", on = "m", arrives ' ..
    '= lw.timing.constant(1), takes = 0 }',
    'task "t": deadline is missing' },
  { "no_execution_time",
    'rig:task { "t", on = "mcu", priority = 1, every = 1 }',
    'task "t": takes is missing' },
  { "a_negative_execution_time",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, takes = lw.timing.uniform("-2 ' ..
    'us", "3 us") }',
    'task "t": takes has its minimum at %-2e%-06 s; a duration is at least 0' },
  { "cycles_without_a_clock",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, takes = "3 cycles" }',
    'task "t": takes is stated in cycles, but its core has no clock' },
  { "a_table_with_an_overlap",
    'rig:core { "m", policy = "time-triggered table", cycle = 1, table = { { "t", at = 0, ' ..
    'lasts = 0.5 }, { "t", at = 0.4, lasts = 0.1 } } }',
    'core "m": table: the slot of "t" at 0.4 s overlaps the one before, which ends at 0.5 ' ..
    's' },
  { "a_slot_beyond_the_cycle",
    'rig:core { "m", policy = "time-triggered table", cycle = 1, table = { { "t", at = 0.8, ' ..
    'lasts = 0.5 } } }',
    'core "m": table: the slot of "t" ends at 1.3 s; the cycle is 1 s' },
  { "a_slot_of_nobody",
    'rig:core { "m", policy = "time-triggered table", cycle = 1, table = { { "a", at = 0, ' ..
    'lasts = 0.5 } } }',
    'core "m": table: no task "a" on it' },
  { "a_policy_that_is_none",
    'rig:core { "m", policy = "fair" }',
    'core "m": policy' },
  { "a_section_that_ends_first",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, takes = 1, sections = { { "spi", ' ..
    'from = "50 %", to = "20 %" } } }',
    'task "t": to of a section is 0.2' },
  { "a_handler_that_locks",
    'rig:task { "t", on = "mcu", interrupt = 1, every = 1, takes = 1, sections = { { "spi" ' ..
    '} } }',
    'task "t": sections: an interrupt handler locks no resource' },
  { "a_law_without_a_period",
    'rig:value { "v" } rig:task { "t", on = "mcu", priority = 1, arrives = ' ..
    'lw.timing.constant(1), takes = 0, law = lw.law.p { kp = 1 }, wanted = 1, measured = 0, ' ..
    'output = "v" }',
    'task "t": its releases have no period; its law wants a nominal period' },
  { "an_unknown_field",
    'rig:task { "t", on = "mcu", priorty = 1, every = 1, takes = 0 }',
    'task "t": .*"priorty"; nearest "priority"' },
  { "a_frame_on_a_core",
    'rig:frame { "f", on = "mcu", priority = 1, every = 1 }',
    'frame "f": on: no bus "mcu"' },
  { "a_frame_too_long",
    'rig:bus { "can", bits_per_second = 1e6 } rig:frame { "f", on = "can", priority = 1, ' ..
    'bytes = 9, every = 1 }',
    'frame "f": bytes is 9; permitted 0 to 8' },
  { "two_writers",
    'rig:value { "v" } for i = 1, 2 do rig:task { "t" .. i, on = "mcu", priority = 1, every ' ..
    '= 1, takes = 0, law = lw.law.p { kp = 1 }, wanted = 1, measured = 0, output = "v" } end',
    'task "t2": output: "v" is already written by a loop or task' },
  { "a_queue_of_nothing",
    'rig:task { "t", on = "mcu", priority = 1, every = 1, takes = 0, queue = 0 }',
    'task "t": queue is 0; permitted 1 to 64' },
}

for _, r in ipairs(refused) do
  test(r[1] .. "_is_refused_in_words", function()
    local ok, message = pcall(function()
      local rig = lw.rig "refused"
      rig:core { "mcu", urgent = "larger", resources = { "spi" } }
      assert(load(r[2], "=study.lua", "t", { rig = rig, lw = lw }))()
      rig:freeze { lasts = 1 }
    end)
    equal(ok, false)
    equal(tostring(message):find("study.lua:1: " .. r[3]) ~= nil, true, tostring(message))
  end)
end

test("a_core_asked_for_more_than_it_has_says_so", function()
  local rig = bare({}, { { "t", priority = 1, every = "10 us", takes = "25 us" } })
  local text = table.concat(rig:describe(), "\n")
  equal(text:find("250 %% of its time on average, 250 %% at most: more than it has") ~= nil, true)
end)

test("jobs_that_wait_for_one_another_end_the_run", function()
  local rig = bare({ resources = { "p", "q" } },
    { { "a", priority = 2, every = "1 ms", takes = "20 us", sections = { { "p", from = 0,
      to = "15 us" },
        { "q", from = "8 us", to = "12 us" } } },
      { "b", priority = 1, every = "1 ms", offset = "5 us", takes = "20 us",
        sections = { { "q", from = 0, to = "15 us" }, { "p", from = "2 us", to = "12 us" } } } })
  local _, message = rig:run { lasts = "1 ms" }:status()
  equal(message, 'at 1e-05 s: "mcu": its jobs wait for one another\'s resources and none can go on')
end)

harness.finish()
