-- Response times computed from a rig, against what its runs show; what is not covered, in words.

local lw = require "latewood"
local harness = require "harness"
local timed = require "latewood.timed"
local test, equal, near = harness.test, harness.equal, harness.near

-- A core with tasks that compute nothing. All numbers are invented.
local function bare(core, tasks)
  local rig = lw.rig "mount processor"
  core[1], core.urgent = "mcu", "smaller"
  rig:core(core)
  for _, t in ipairs(tasks) do
    t.on = "mcu"
    rig:task(t)
  end
  return rig
end

local function worst_seen(rig, name)
  return rig:run { lasts = "60 ms", seed = 5,
    metrics = { { "response maximum", of = name } } }:metric "response maximum"
end

test("computed_responses_are_what_a_run_from_the_critical_instant_shows", function()
  -- CHECKS S-17: J. Lehoczky, RTSS 1990, example 3: 26 and 118, the fifth job is the worst
  local rig = bare({}, { { "a", priority = 1, every = "70 us", takes = "26 us" },
    { "b", priority = 2, every = "100 us", takes = "62 us", queue = 8 } })
  local core = rig:timed()[1]
  equal(core.analysed, true)
  equal(core.schedulable, false)
  equal(core.tasks[2].job, 5)
  near(core.tasks[2].response, 118e-6, 1e-12)
  for _, t in ipairs(core.tasks) do
    -- both are whole ticks, read back as seconds
    near(worst_seen(rig, t.name), t.response, 1e-12)
  end
end)

test("no_run_with_costs_jitter_and_sections_is_later_than_its_bound", function()
  for _, locking in ipairs { "inheritance", "ceiling" } do
    local rig = bare({ context_switch = "2 us", dispatch_cost = "1 us", release_cost = "1 us",
      resources = { "spi" }, locking = locking }, {
      { "irq", interrupt = 1, every = "130 us", takes = "9 us" },
      { "a", priority = 1, every = "200 us", takes = lw.timing.uniform("10 us", "30 us"),
        sections = { { "spi", from = "10 %", to = "60 %" } } },
      { "b", priority = 2, every = "310 us", takes = "50 us", offset = "11 us",
        jitter = lw.timing.uniform(0, "20 us") },
      { "c", priority = 3, every = "900 us", takes = "120 us", queue = 4,
        sections = { { "spi", from = "5 us", to = "40 us" } },
        masked = { { from = "90 %", to = "finish" } } } })
    local core = rig:timed()[1]
    equal(core.analysed, true)
    equal(core.schedulable, true)
    for _, t in ipairs(core.tasks) do
      local seen = worst_seen(rig, t.name)
      assert(seen <= t.response, ("%s: %g over %g"):format(t.name, seen, t.response))
      assert(seen > 0.3 * t.response, t.name .. " is nowhere near its bound")
    end
  end
end)

test("slack_is_what_a_task_may_grow_by", function()
  local function core(takes)
    return bare({}, { { "a", priority = 1, every = "100 us", takes = "30 us" },
      { "b", priority = 2, every = "200 us", takes = takes } }):timed()[1]
  end
  local slack = core("50 us").tasks[2].slack
  near(slack, 90e-6, 1e-9)
  equal(core(50e-6 + slack).schedulable, true)
  equal(core(50e-6 + slack + 2e-12).schedulable, false)
end)

test("what_is_not_covered_is_said_and_what_is_more_urgent_keeps_its_bound", function()
  local rig = bare({}, { { "a", priority = 1, every = "100 us", takes = "30 us", offset = "5 us" },
    { "b", priority = 2, released_by = "a", takes = "10 us" } })
  local core = rig:timed()[1]
  equal(#core.tasks, 1)
  near(core.tasks[1].response, 30e-6, 1e-12)
  local said = table.concat(timed.describe(rig), "\n")
  assert(said:find('"b" is released by a task', 1, true), said)
  assert(said:find("offsets are ignored", 1, true), said)
  assert(said:find('"a" responds within 30 us, deadline 100 us: met', 1, true), said)
  core = bare({ policy = "cooperative" }, { { "a", priority = 1, every = "1 ms",
    takes = "1 us" } }):timed()[1]
  equal(core.analysed, false)
  assert(core.notes[1]:find("cooperative", 1, true))
end)

test("overload_has_no_bound", function()
  local rig = bare({}, { { "a", priority = 1, every = "100 us", takes = "60 us" },
    { "b", priority = 2, every = "100 us", takes = "60 us" } })
  local core = rig:timed()[1]
  equal(core.overload, true)
  equal(core.tasks[2].response, nil)
  equal(core.tasks[2].slack, nil)
  assert(table.concat(timed.describe(rig), "\n"):find("more is asked for than the core has", 1,
    true))
end)

harness.finish()
