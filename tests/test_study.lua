-- Studies and what the shipped modules make of them: parameters, variants, verdicts, figures, the
-- text for a person, JSON.

local harness = require "harness"
local lw = require "latewood"
local figure = require "latewood.figure"
local json = require "latewood.json"
local read_json = require "read_json"
local report = require "latewood.report"
local svg = require "latewood.svg"
local trial = require "latewood.trial"
local words = require "latewood.words"
local test, equal, raises = harness.test, harness.equal, harness.raises

local NAN = 0 / 0

-- A rig whose one signal "x" has the value p.x; "noise" draws anew each millisecond.
local function constant(p)
  local rig = lw.rig "constant"
  rig:source { "x", lw.source.constant(p.x) }
  rig:source { "noise", lw.source.noise { deviation = 1, every = "1 ms" } }
  return rig
end

local function study_of(t)
  t[1] = t[1] or constant
  t.lasts = t.lasts or "10 ms"
  t.given = t.given or { x = 1 }
  return lw.study(t)
end

-- A loop that grows without bound where kp is large.
local function coil(p)
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.winding { resistance = "0.5 ohm", inductance = "4 mH" } }
  rig:adc { "current", of = "coil.current", every = "100 us" }
  rig:dac { "bridge", to = "coil.voltage" }
  rig:loop { "control", law = lw.law.p { kp = p.kp }, wanted = 2, measured = "current",
    output = "bridge", latency = "37 %" }
  return rig
end

local function pairs_of(t)
  local list = {}
  for name, text in pairs(t) do list[#list + 1] = { name = name, text = text } end
  return list
end

local function run(study, options, arguments)
  return assert(study:execute(pairs_of(arguments or {}), options or {}))
end

local function verdict(study, options)
  return run(study, options).verdict
end

-- ---- parameters

local function test_parameters()
  local s = study_of { given = { x = 1, y = "2 ms", z = true }, before = { x = 2 },
    after = { x = 3 } }
  local function value(text)
    return assert(trial.parameters(s, { { name = "y", text = text } }, {})).y
  end

  test("a_value_of_the_command_line_has_the_type_it_reads_as", function()
    equal(value "5", 5)
    equal(value "-2.5e-3", -2.5e-3)
    equal(value "true", true)
    equal(value "false", false)
    equal(value "45 us", "45 us")
    equal(value "", "")
    equal(value "nan", "nan")
    equal(value "inf", "inf")
    equal(value "1e999", "1e999")
    equal(value "0x10", "0x10")
  end)

  test("given_yields_to_the_command_line_and_both_to_the_variant", function()
    local p = assert(trial.parameters(s, { { name = "y", text = "7" } }, s.after))
    equal(p.x, 3)
    equal(p.y, 7)
    equal(p.z, true)
    equal(s.given.y, "2 ms")
  end)

  test("a_parameter_that_is_not_given_is_named_with_the_nearest", function()
    local p, why = trial.parameters(study_of { given = { latency = 1 } },
      { { name = "latncy", text = "1" } }, {})
    equal(p, nil)
    equal(why, 'the study has no parameter "latncy"; nearest "latency"')
  end)

  test("what_a_variant_sets_the_command_line_may_not", function()
    local p, why = trial.parameters(s, { { name = "x", text = "1" } }, s.before)
    equal(p, nil)
    assert(why:find('parameter "x" is set by the study\'s variants', 1, true), why)
  end)

  test("reading_or_assigning_what_is_no_parameter_raises", function()
    local function reading(p) return constant { x = p.xx } end
    raises(function() run(study_of { reading }) end, 'no parameter "xx"; nearest "x"')
    local function assigning(p) p.x = 3 end
    raises(function() run(study_of { assigning }) end, 'parameter "x" is assigned')
  end)

  test("parameters_are_walked_in_the_order_of_their_names", function()
    local seen = {}
    local function walking(p)
      for name in pairs(p) do seen[#seen + 1] = name end
      return constant { x = 1 }
    end
    run(study_of { walking, given = { d = 1, b = 2, a = 3, c = 4, e = 5 } })
    equal(table.concat(seen), "abcde")
  end)
end

-- ---- verdicts

local function required(x, limit, field, kind)
  local s = study_of { given = { x = x } }
  return s:requirement { "q", kind or "final", of = "x", [field] = limit }
end

local function test_verdicts()
  test("a_limit_that_is_reached_exactly_is_met", function()
    equal(verdict(required(3, 3, "at_most")), "met")
    equal(verdict(required(3, 3 - 1e-15, "at_most")), "not met")
    equal(verdict(required(3, 3, "at_least")), "met")
    equal(verdict(required(3, 3 + 1e-15, "at_least")), "not met")
  end)

  test("without_a_requirement_nothing_is_judged", function()
    equal(verdict(study_of {}:metric { "final", of = "x" }), nil)
  end)

  test("the_verdict_is_of_the_second_variant", function()
    local function two(before, after)
      local s = study_of { before = { x = before }, after = { x = after } }
      return s:requirement { "q", "final", of = "x", at_most = 2 }
    end
    equal(verdict(two(3, 1)), "met")
    equal(verdict(two(1, 3)), "not met")
    local result = run(two(3, 1))
    equal(result.judged[1][1].verdict, "not met")
    equal(result.judged[1][2].verdict, "met")
  end)

  test("a_signal_that_never_settles_does_not_meet_its_settling_time", function()
    local s = study_of {}
    s:requirement { "settled", "settling time", of = "x", level = 5, base = 0, at_most = "1 s" }
    local result = run(s)
    equal(result.verdict, "not met")
    equal(result.judged[1][1].reason, "never settled")
  end)

  test("another_value_that_is_no_number_leaves_the_verdict_open", function()
    local s = study_of {}
    s:requirement { "risen", "rise time", of = "x", level = 5, base = 0, at_most = "1 s" }
    local result = run(s)
    equal(result.verdict, "undecided")
    equal(result.judged[1][1].reason, "never reached")
    s:requirement { "q", "final", of = "x", at_most = 2 }
    equal(verdict(s), "undecided")
    s:requirement { "r", "final", of = "x", at_most = 0 }
    equal(verdict(s), "not met")
  end)

  test("a_run_that_ends_early_meets_nothing_and_says_when_and_why", function()
    local s = study_of { coil, lasts = "200 ms", given = { kp = 1000 } }
    s:requirement { "final", of = "coil.current", at_most = 1e300 }
    local result = run(s)
    equal(result.verdict, "not met")
    equal(result.judged[1][1].reason, "ended early")
    local e = result.variants[1].ended[1]
    equal(e.status, "LW_ERR_NOT_FINITE")
    assert(e.at > 0 and e.at < 0.2, e.at)
    assert(e.message:find "not finite", e.message)
  end)

  test("limits_have_the_unit_of_their_metric", function()
    local s = study_of {}
    local function with(kind, limit)
      return function()
        s:requirement { tostring(limit) .. kind, kind, of = "x", level = 1, at_most = limit }
      end
    end
    raises(with("overshoot", "3 V"), "3 V")
    raises(with("settling time", "3 A"), "3 A")
    raises(with("settling time", "3 %"), "3 %")
    with("settling time", "3 ms")()
    with("overshoot", "3 %")()
    with("final", "3 A")()
    equal(s.requirements[1].at_most, 0.003)
    equal(s.requirements[2].at_most, 0.03)
    equal(s.requirements[3].at_most, 3)
  end)
end

-- ---- several runs

local function noisy(t)
  t = t or {}
  t.runs = t.runs or 8
  return study_of(t):metric { "last", "final", of = "noise" }
end

local function values_of(study, options)
  return run(study, options).variants[1].values.last
end

local function test_runs()
  test("each_run_draws_anew_and_the_same_whatever_their_number", function()
    local eight, three = values_of(noisy()), values_of(noisy { runs = 3 })
    equal(#eight, 8)
    for i = 1, 3 do equal(three[i], eight[i]) end
    assert(eight[1] ~= eight[2] and eight[2] ~= eight[3])
    harness.same_list(values_of(noisy()), eight)
  end)

  test("options_stand_above_the_study", function()
    equal(#values_of(noisy(), { runs = 2 }), 2)
    assert(values_of(noisy(), { seed = 2 })[1] ~= values_of(noisy(), { seed = 1 })[1])
    equal(values_of(noisy { seed = 9 })[1], values_of(noisy(), { seed = 9 })[1])
  end)

  test("variants_see_the_same_draws", function()
    local result = run(noisy { before = { x = 1 }, after = { x = 2 } })
    harness.same_list(result.variants[1].values.last, result.variants[2].values.last)
  end)

  test("one_run_beyond_the_limit_is_enough_and_is_named", function()
    local values, largest = values_of(noisy()), 1
    for i, v in ipairs(values) do
      if v > values[largest] then largest = i end
    end
    local s = noisy()
    s:requirement { "below", "final", of = "noise", at_most = values[largest] - 1e-9 }
    local j = run(s).judged[1][1]
    equal(j.verdict, "not met")
    equal(j.failed, 1)
    equal(j.worst_run, largest - 1)
    equal(j.worst, values[largest])
    s = noisy()
    s:requirement { "below", "final", of = "noise", at_most = values[largest] }
    equal(verdict(s), "met")
  end)

  -- closed form: (1 - q)^n = 0.05 gives q < 3/n, since -ln 0.05 = 2.9957
  test("no_failure_in_n_runs_bounds_the_failing_share_by_three_over_n", function()
    local function bound(runs, limit)
      local s = noisy { runs = runs }
      return run(s:requirement { "q", "final", of = "noise", at_most = limit }).failing_below
    end
    equal(bound(10, 100), 3 / 10)
    equal(bound(2, 100), 1)
    equal(bound(1, 100), nil)
    equal(bound(10, -100), nil)
    for _, n in ipairs { 4, 10, 1000 } do assert((1 - 3 / n) ^ n < 0.05) end
  end)

  test("each_stretch_of_the_studys_code_is_announced", function()
    local n = 0
    run(noisy { runs = 5 }, { again = function() n = n + 1 end })
    equal(n, 6) -- the rig, and each run
  end)
end

-- ---- figures

local function drawn(t)
  local s = study_of { coil, lasts = t.lasts or "5 ms", given = { kp = 5 }, before = t.before,
    after = t.after, runs = t.runs, called = t.called }
  s:metric { "final", of = "coil.current" }
  for _, f in ipairs(t) do s:figure(f) end
  local result = run(s)
  return figure.all(s, result), result, s
end

-- Tags of a drawing close in the order in which they were opened, and names are quoted.
local function well_formed(text)
  local open = {}
  assert(not text:find("[%z\1-\8\11\12\14-\31]"), "a control character")
  assert(utf8.len(text), "no UTF-8")
  for tag in text:gmatch "<([^>]+)>" do
    local name = tag:match "^/?([%a]+)"
    assert(name, tag)
    if tag:sub(1, 1) == "/" then
      equal(table.remove(open), name)
    elseif tag:sub(-1) ~= "/" then
      open[#open + 1] = name
    end
    assert(select(2, tag:gsub('"', "")) % 2 == 0, tag)
  end
  equal(#open, 0)
  assert(not text:gsub("&%a+;", ""):gsub("&#%d+;", ""):find "&", "a bare &")
  assert(not text:find "nan" and not text:find "inf[^i]", "no number")
end

local function test_figures()
  test("a_figure_is_well_formed_whatever_its_words", function()
    local title = "a <b> & \"c\" \27[31m \xff \u{F6}"
    local files = drawn { { title, of = "coil.current", note = "1 < 2 & 'x' \1", unit = "<A>" },
      before = { kp = 5 }, after = { kp = 1000 }, called = { "\27 &", "\xff>" } }
    well_formed(files[1].text)
    raises(function() well_formed "<svg><g></svg>" end, "svg") -- the check can fail
    raises(function() well_formed "<svg>a & b</svg>" end, "&")
  end)

  test("figures_with_one_title_get_files_of_their_own", function()
    local files = drawn { { "same", of = "coil.current" }, { "Same!", of = "bridge" },
      { "\u{E9}", of = "bridge" } }
    equal(files[1].file, "same.svg")
    equal(files[2].file, "same-2.svg")
    equal(files[3].file, "figure.svg")
  end)

  test("a_figure_shows_dark_and_light_and_what_each_shape_is", function()
    local text = drawn { { "f", of = "coil.current", wanted = 2, band = { 1.5, 2.5 } },
      before = { kp = 5 }, after = { kp = 6 } }[1].text
    for _, wanted in ipairs { "prefers-color-scheme:dark", "<title>coil.current, before</title>",
      "<title>coil.current, after</title>", "<title>wanted</title>", "<title>band: 1.5</title>",
      "A result of the model, not of the machine." } do
      assert(text:find(wanted, 1, true), wanted)
    end
    local _, n = text:gsub('<polyline class="trace s1" stroke%-dasharray', "")
    equal(n, 1) -- before is dashed, after is not
    equal(select(2, text:gsub('<polyline class="trace s2" points', "")), 1)
  end)

  test("observing_changes_no_metric", function()
    local _, with = drawn { { "f", of = { "coil.current", "bridge" } },
      { "l", latency_of = "control" } }
    local _, without = drawn {}
    equal(with.variants[1].values.final[1], without.variants[1].values.final[1])
  end)

  test("a_loop_is_recorded_once_for_any_number_of_figures", function()
    local _, result = drawn { { "l", latency_of = "control" }, { "m", latency_of = "control" } }
    equal(result.variants[1].traces[1].control, result.variants[1].traces[2].control)
    equal(#result.variants[1].traces[1].control.latency, 51) -- each 100 us of 5 ms, both ends
  end)

  test("a_histogram_counts_every_sample_of_its_window_once", function()
    local text = drawn { { "l", latency_of = "control", from = "1 ms", to = "1.9 ms" } }[1].text
    -- samples at 1 ms to 1.9 ms; the law steps at the end of conversion, here at once
    assert(text:find("control: 10 of 10 from", 1, true), text)
  end)

  test("a_record_that_is_full_spoils_neither_verdict_nor_figure", function()
    local function quick()
      local rig = lw.rig "quick"
      rig:source { "x", lw.source.constant(1) }
      rig:adc { "a", of = "x", every = "1 us" }
      rig:value { "v" }
      rig:loop { "control", law = lw.law.p { kp = 1 }, wanted = 0, measured = "a", output = "v",
        latency = "50 %" }
      return rig
    end
    local s = study_of { quick, lasts = "1.05 s" } -- a record holds 1,000,000 rows
    s:requirement { "final", of = "v", at_most = 0 }
    s:figure { "l", latency_of = "control" }
    local result = run(s)
    equal(result.verdict, "met")
    equal(result.variants[1].values.final[1], -1)
    harness.near(result.variants[1].cut, 1, 1e-5)
    assert(figure.all(s, result)[1].text:find "drawn up to 1 s")
  end)

  test("an_unstable_variant_leaves_the_other_readable", function()
    local files, result = drawn { { "f", of = "coil.current" }, lasts = "200 ms",
      before = { kp = 5 }, after = { kp = 1000 } }
    equal(#result.variants[2].ended, 1)
    assert(files[1].text:find "after ended early")
    assert(not files[1].text:find "e%+") -- marks of the axis keep to the other's range
  end)

  test("fields_of_a_figure_are_checked", function()
    local s = study_of {}
    local function refuses(t, ...)
      raises(function() s:figure(t) end, ...)
    end
    refuses({ of = "x" }, "title is missing")
    refuses({ "f" }, "state one of of, latency_of and fit")
    refuses({ "f", of = "x", latency_of = "y" }, "state one of")
    refuses({ "f", off = "x" }, 'no field "off"; nearest "of"')
    refuses({ "f", of = {} }, "of is no signal")
    refuses({ "f", of = { "x", "x" } }, "twice")
    refuses({ "f", of = "x", from = "2 ms", to = "1 ms" }, "from before to")
    refuses({ "f", of = "x", to = "11 ms" }, "permitted 0 to 0.01 s")
    refuses({ "f", of = "x", to = 1e-3, ["until"] = 1e-3 }, "state one")
    refuses({ "f", of = "x", every = "1 ns" }, "every is 1e-09 s")
    refuses({ "f", of = "x", every = 0 }, "every is 0 s")
    refuses({ "f", of = "x", note = 5 }, "note is a number")
    refuses({ "f", of = "x", band = 5 }, "band is a number")
    refuses({ "f", latency_of = "y", band = { 1 } }, "band has no place")
    equal(#s.figures, 0)
  end)
end

-- ---- drawing

local function traced(xs, ys)
  local page = svg.page { title = "t", legend = {}, notes = {}, panels = { { x_label = "x",
    y_label = "y", x = { xs[1], xs[#xs] }, y = { -1, 1 }, x_marks = {}, traces = {
      { name = "n", style = 2, x = xs, y = ys } } } } }
  local low, high
  local n = 0
  for y in page:match('points="([^"]*)"'):gmatch "%S+ (%S+)" do
    low, high = math.min(low or 1e9, tonumber(y)), math.max(high or 0, tonumber(y))
    n = n + 1
  end
  return low, high, n
end

local function test_drawing()
  test("one_point_in_a_hundred_thousand_still_shows", function()
    local xs, ys = {}, {}
    for i = 1, 100000 do xs[i], ys[i] = i, 0 end
    local low, high, n = traced(xs, ys)
    equal(low, high)
    assert(n <= 3, n) -- a level line needs its ends
    ys[54321] = 1
    local spike = traced(xs, ys)
    assert(spike < low - 50, "the spike is " .. (low - spike) .. " high") -- of 190 pixels, padded
    ys[54321], ys[777] = 0, -1
    assert(select(2, traced(xs, ys)) > high + 50)
  end)

  test("values_that_are_no_numbers_are_left_out", function()
    local low, high = traced({ 1, 2, 3, 4 }, { 0, NAN, math.huge, -math.huge })
    assert(low >= 0 and high < 1000) -- infinity stands at the edge of the axis
  end)

  test("ticks_are_round_and_inside", function()
    harness.same_list(svg.ticks(0, 1, 5), { 0.0, 0.2, 0.4, 0.6000000000000001, 0.8, 1.0 })
    for _, range in ipairs { { 0, 1e-9 }, { -3e300, 4e300 }, { 1e15, 1e15 + 8 }, { -7, -6.99 } } do
      local ticks = svg.ticks(range[1], range[2], 6)
      assert(#ticks >= 2 and #ticks <= 8, #ticks)
      for _, t in ipairs(ticks) do
        assert(t >= range[1] - 1e-6 * (range[2] - range[1]))
        assert(t <= range[2] + 1e-6 * (range[2] - range[1]))
      end
    end
  end)

  test("marks_have_the_digits_that_tell_them_apart", function()
    local function names(...)
      local marks = {}
      for i, v in ipairs { ... } do marks[i] = { v, v } end
      svg.named(marks)
      for i, m in ipairs(marks) do marks[i] = m[2] end
      return table.concat(marks, " ")
    end
    equal(names(0, 0.5, 1), "0 0.5 1")
    equal(names(0, 2000, 10000), "0 2000 10000")
    equal(names(1.00001, 1.00002), "1.00001 1.00002")
    equal(names(0, 1e-9, 2e-9), "0 1e-09 2e-09")
    equal(names(-1e7, 0, 1e7), "-1e+07 0 1e+07")
  end)
end

-- ---- words and JSON

local function test_words()
  test("text_keeps_its_words_within_the_width", function()
    local seven = ("\u{FC}"):rep(7) -- letters of two bytes
    harness.same_list(words.wrap("one two three " .. seven .. " xxxxxxxxxxxx", 7),
      { "one two", "three", seven, "xxxxxxx", "xxxxx" })
    equal(words.cut("\u{FC}\u{FC}\u{FC}\u{FC}", 3), "\u{FC}\u{FC}~")
    equal(words.pad("\u{FC}", 3, true), "  \u{FC}")
  end)

  test("nothing_a_terminal_obeys_is_left_in_plain_text", function()
    equal(words.plain "a\27[31mb\7\nc\xC2\x9Bd", "a [31mb c d")
    equal(words.plain "\xff\xfea\xc3", "\u{FFFD}\u{FFFD}a\u{FFFD}")
    equal(words.plain "\u{E9}", "\u{E9}")
  end)

  test("paths_are_quoted_for_a_shell_where_they_must_be", function()
    equal(words.shell "a/b-c.lua", "a/b-c.lua")
    equal(words.shell "a b's.lua", "'a b'\\''s.lua'")
    equal(words.shell "-x.lua", "'-x.lua'")
    equal(words.shell "", "''")
  end)
end

local function test_json()
  test("what_is_written_reads_back", function()
    local text = 'quote " back \\ tab \t bell \7 del \127 \u{E9} \u{1F600}'
    local value = { list = json.list { 1, 2.5, true, false, text }, empty = json.list {}, none = {},
      deep = { deep = { deep = "x" } } }
    local back = read_json(json.encode(value))
    harness.same_list(back.list, value.list)
    equal(#back.empty, 0)
    equal(back.deep.deep.deep, "x")
  end)

  test("numbers_keep_every_bit_and_whole_ones_have_no_point", function()
    local back = read_json(json.encode(json.list { 0.1, 1e300, 5e-324, -0.0, 2 ^ 53, 1 / 3 }))
    harness.same_list({ back[1], back[2], back[3], back[6] }, { 0.1, 1e300, 5e-324, 1 / 3 })
    equal(json.encode(json.list { 3, math.maxinteger }), "[3, 9223372036854775807]\n")
  end)

  test("no_number_is_null", function()
    local back = read_json(json.encode(json.list { NAN, math.huge, -math.huge }))
    for i = 1, 3 do equal(back[i], read_json.null) end
  end)

  test("keys_stand_as_stated_and_then_sorted", function()
    local t = json.ordered({ "z", "a" }, { a = 1, z = 2, m = 3, b = 4 })
    equal(table.concat(read_json.order[read_json(json.encode(t))]), "zabm")
  end)

  test("bytes_that_are_no_text_and_tables_that_hold_themselves_do_no_harm", function()
    equal(read_json(json.encode { x = "\xffa" }).x, "\u{FFFD}a")
    local t = {}
    t.t = t
    read_json(json.encode(t))
    local with = read_json(json.encode { f = print, t = lw.timing.constant(1e-6) })
    equal(with.f, "function")
    assert(not with.t:find "0x", with.t)
  end)

  test("the_reader_refuses_what_is_no_json", function()
    for _, bad in ipairs { "", "nan", "[1,]", "{}{}", "[01]", "[1.]", "[.5]",
      '["\1"]', '{"a":1,"a":2}', '"\\ud800"', "{a:1}", '["\xff"]', "[1 2]", "tru" } do
      assert(not pcall(read_json, bad), bad)
    end
  end)
end

-- ---- reports

local function widest(lines)
  local width = 0
  for _, line in ipairs(lines) do width = math.max(width, words.width(line)) end
  return width
end

local function test_reports()
  local long = ("a very long name of something "):rep(4)

  test("no_line_is_wider_than_eighty_columns_whatever_the_names", function()
    local s = study_of { title = long .. long, runs = 3, before = { x = 1 }, after = { x = 3 },
      called = { long .. 1, long .. 2 } }
    s:requirement { long, "final", of = "x", at_most = 2 }
    s:requirement { "rise " .. long, "rise time", of = "x", level = 9, base = 0, at_most = "1 s" }
    s:metric { "noise " .. long, "final", of = "noise" }
    local lines = report.lines(s, run(s))
    assert(widest(lines) <= 80, widest(lines))
    assert(table.concat(lines, "\n"):find "NOT MET of the model: 0 of 2 requirements met")
  end)

  test("why_a_verdict_is_not_met_stands_beside_it", function()
    local s = study_of { runs = 3 }
    s:requirement { "settled", "settling time", of = "x", level = 5, base = 0, at_most = "1 s" }
    s:requirement { "small", "final", of = "x", at_most = 0.5 }
    local text = table.concat(report.lines(s, run(s)), "\n")
    for _, wanted in ipairs { "settled: never settled, which counts as not met; 3 runs of 3",
      "small: beyond the limit; 3 runs of 3, worst in run 0" } do
      assert(text:find(wanted, 1, true), text)
    end
  end)

  test("the_data_holds_what_the_text_says", function()
    local s = study_of { title = "t", runs = 30, before = { x = 1 }, after = { x = 2 } }
    s:requirement { "small", "final", of = "x", at_most = 5 }
    local data = read_json(json.encode(report.data(s, run(s), "name", json.list { "f.svg" })))
    equal(data.schema, "latewood-run-1")
    equal(data.verdict, "met")
    equal(data.of, "the model")
    equal(data.bound.failing_below, 0.1)
    equal(data.requirements[1].variants[2].worst, 2)
    equal(#data.variants[1].metrics[1].values, 30)
    equal(data.variants[2].parameters.x, 2)
    equal(#data.cautions, 3)
    equal(table.concat(read_json.order[data], " ", 1, 6), "schema version study title verdict of")
  end)

  test("colour_marks_the_verdict_only", function()
    local s = required(1, 2, "at_most")
    local plain, coloured = report.lines(s, run(s)), report.lines(s, run(s), true)
    assert(not table.concat(plain):find "\27")
    equal((table.concat(coloured, "\n"):gsub("\27%[[%d;]*m", "")), table.concat(plain, "\n"))
    equal(select(2, table.concat(coloured):gsub("\27", "")), 2)
  end)
end

-- ---- the definition

local function test_definition()
  test("fields_of_a_study_are_checked", function()
    raises(function() lw.study {} end, "the function that builds the rig is wanted")
    raises(function() study_of { runs = 0 } end, "runs is 0")
    raises(function() study_of { seed = -1 } end, "seed is -1")
    raises(function() study_of { title = 5 } end, "title is a number")
    raises(function() study_of { called = { "a" } } end, "called names the two variants")
    raises(function() study_of { called = { "a", "a" } } end, 'both names are "a"')
    raises(function() study_of { given = 5 } end, "given is number")
    raises(function() lw.study(5) end, "a table is wanted")
  end)

  test("a_table_that_looks_like_a_study_is_none", function()
    local module = require "latewood.study"
    equal(module.is(study_of {}), true)
    equal(module.is(setmetatable({}, { __index = study_of {} })), false)
    equal(module.is(nil), false)
    raises(function() lw.study.execute = print end, "assigned")
    equal(getmetatable(study_of {}), false)
  end)
end

test_parameters()
test_verdicts()
test_runs()
test_figures()
test_drawing()
test_words()
test_json()
test_reports()
test_definition()
harness.finish()
