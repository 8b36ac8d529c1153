-- Figures of a study: responses of the variants over one another, and latencies as histograms.

local measured = require "latewood.measured"
local svg = require "latewood.svg"
local words = require "latewood.words"

local math = require("latewood").math -- the same bits everywhere

local figure = {}

local LINE = 128 -- characters of a note
local WANTED = 3 -- style of what is wanted; 1 and 2 are before and after

local function style_of(result, v)
  return #result.variants == 1 and 2 or v
end

-- Notes below a figure; the last says what every figure must say.
local function notes_of(f, result, more)
  local notes = {}
  local function add(text)
    for _, line in ipairs(words.wrap(text, LINE)) do notes[#notes + 1] = line end
  end
  if f.note then add(words.plain(f.note)) end
  for _, text in ipairs(more or {}) do add(text) end
  for _, variant in ipairs(result.variants) do
    if variant.cut then
      add(("%s: more events than a record holds; drawn up to %s."):format(variant.name,
        words.time(variant.cut)))
    end
    for _, e in ipairs(variant.ended) do
      if e.run == 0 then
        add(("%s ended early, drawn as far as the axes reach: %s"):format(variant.name,
          words.plain(e.message)))
      end
    end
  end
  add("A result of the model, not of the machine." ..
    (result.runs > 1 and (" Run 0 of %d."):format(result.runs) or ""))
  return notes
end

-- ---- responses

local LARGEST = 1e280 -- beyond, an axis has no room for the sums made of it

local function extend(range, ys)
  local lo, hi = range[1], range[2]
  for _, y in ipairs(ys) do
    if y > -LARGEST and y < LARGEST then
      if not lo or y < lo then lo = y end
      if not hi or y > hi then hi = y end
    end
  end
  range[1], range[2] = lo, hi
end

-- The unit of a panel: `unit` is a list, one for each signal, or that of the first.
local function unit_of(f, index)
  local unit = type(f.unit) == "table" and f.unit[index] or index == 1 and f.unit
  return unit and " / " .. tostring(unit) or ""
end

local function marks_in(size, lo, hi)
  local marks = {}
  for i, t in ipairs(svg.ticks(lo / size, hi / size, 8)) do marks[i] = { t * size, t } end
  return svg.named(marks)
end

local function wanted_trace(f, result)
  if type(f.wanted) == "number" then
    return { name = "wanted", style = WANTED, x = { f.from, f.till }, y = { f.wanted, f.wanted } }
  end
  local record = result.variants[#result.variants].traces[f.index][f.wanted]
  return { name = f.wanted, style = WANTED, x = record.time, y = record.value }
end

local function ended_early(variant)
  return #variant.ended > 0 and variant.ended[1].run == 0
end

-- Range of a panel: of what is wanted, the band and all variants. One that ended early reaches
-- beyond the others by their own height at most, so that these can still be read.
local function range_of(p, result)
  local range, wild = {}, {}
  extend(range, p.limits)
  for _, trace in ipairs(p.traces) do
    extend(trace.v and ended_early(result.variants[trace.v]) and wild or range, trace.y)
  end
  if not wild[1] then return range[1] and range or { 0, 1 } end
  if not range[1] then return wild end
  local height = range[2] - range[1]
  return { math.min(range[1], math.max(wild[1], range[1] - height)),
    math.max(range[2], math.min(wild[2], range[2] + height)) }
end

-- Traces of one signal in all variants, what is wanted under the first. The last variant is drawn
-- before the others: its line is whole, and theirs, dashed, show on top of it.
local function response_panel(f, index, signal, result, size, unit)
  local p = { x = { f.from, f.till }, traces = {}, limits = f.bands[index] or {},
    x_marks = marks_in(size, f.from, f.till), x_label = "time / " .. unit,
    y_label = words.plain(signal) .. unit_of(f, index) }
  if f.wanted and index == 1 then p.traces[1] = wanted_trace(f, result) end
  for v = #result.variants, 1, -1 do
    local record = result.variants[v].traces[f.index][signal]
    p.traces[#p.traces + 1] = { name = signal .. ", " .. result.variants[v].name, v = v,
      style = style_of(result, v), x = record.time, y = record.value }
  end
  p.y = range_of(p, result)
  return p
end

local function legend_of(f, result, is_bar)
  local legend = {}
  for v, variant in ipairs(result.variants) do
    local name = variant.name
    if #result.variants == 1 then name = f.of and #f.of == 1 and f.of[1] or nil end
    if name then
      legend[#legend + 1] = { name = name, style = style_of(result, v), is_bar = is_bar }
    end
  end
  if f.wanted then
    legend[#legend + 1] = { name = type(f.wanted) == "string" and f.wanted or "wanted",
      style = WANTED }
  end
  if f.bands and #f.bands > 0 then legend[#legend + 1] = { name = "band", style = 4 } end
  return legend
end

-- ---- measured data

local MEASURED = 3

-- Measured data over the first panel, a panel of what they have more than each variant, and notes.
local function overlay(f, result, panels, legend, size, unit)
  local notes, data, last = {}, f.data, result.variants[#result.variants]
  if f.align then
    local by = measured.align(data, last.traces[f.index][f.of[1]], f.align)
    data = measured.within(data:shifted(by), f.from, f.till)
    notes[1] = ("Measured data moved by %s to lie closest."):format(words.time(by))
  end
  local rest = { x = { f.from, f.till }, traces = {}, limits = {}, x_label = "time / " .. unit,
    x_marks = marks_in(size, f.from, f.till), y_label = "measured less run" .. unit_of(f, 1) }
  for v = #result.variants, 1, -1 do
    local variant = result.variants[v]
    local values = f.align and measured.sampled(data, variant.traces[f.index][f.of[1]]) or
      variant.traces[f.index][measured.ROWS].value
    local residual = measured.residuals(data, values)
    rest.traces[#rest.traces + 1] = { name = "measured less " .. variant.name, v = v,
      style = style_of(result, v), x = table.move(data.time, 1, #residual, 1, {}), y = residual }
    local fit = measured.compare("fit", data, values)
    notes[#notes + 1] = ("%s: fit %s, 1 - |y - x| / |y - mean y| over %d rows."):format(
      variant.name, fit and words.metric("fit", fit) or "undefined", data.n)
  end
  local first = panels[1]
  table.insert(first.traces, { name = "measured: " .. data.name, style = MEASURED, x = data.time,
    y = data.value })
  first.y, rest.y = range_of(first, result), range_of(rest, result)
  table.insert(panels, 2, rest)
  legend[#legend + 1] = { name = "measured", style = MEASURED }
  return notes
end

local function response(f, result)
  local size, unit = words.time_unit(f.till)
  local panels, legend, notes = {}, legend_of(f, result), nil
  for i, signal in ipairs(f.of) do
    panels[i] = response_panel(f, i, signal, result, size, unit)
  end
  if f.data then notes = overlay(f, result, panels, legend, size, unit) end
  return svg.page { title = words.plain(f.title), legend = legend, panels = panels,
    notes = notes_of(f, result, notes) }
end

local units = { time_constant = " s", delay = " s", natural_frequency = " rad/s" }

-- A fitted plant beside the data: no run.
local function fitted(f)
  local fit, panels, notes = f.fit, {}, {}
  local time = fit.measured.time
  local from, till = time[1], time[#time]
  local size, unit = words.time_unit(math.max(math.abs(from), math.abs(till)))
  local function panel(label, traces)
    local p = { x = { from, till }, traces = traces, limits = {}, x_label = "time / " .. unit,
      x_marks = marks_in(size, from, till), y_label = label .. unit_of(f, 1) }
    p.y = range_of(p)
    panels[#panels + 1] = p
  end
  panel("step response", { { name = "measured", style = MEASURED, x = time,
    y = fit.measured.value }, { name = fit.kind, style = 2, x = time, y = fit.model } })
  panel("measured less model", { { name = "residual", style = 2, x = time, y = fit.residual } })
  for _, name in ipairs { "gain", "time_constant", "natural_frequency", "damping", "delay",
                          "offset" } do
    if fit.parameters[name] then
      notes[#notes + 1] = ("%s %.6g%s, standard error %.2g"):format((name:gsub("_", " ")),
        fit.parameters[name], units[name] or "", fit.errors[name])
    end
  end
  notes[#notes + 1] = ("fit %s, R squared %.6g, residual %.4g rms, %d rows"):format(
    words.metric("fit", fit.fit), fit.r_squared, fit.residual_rms, fit.n)
  if f.note then notes[#notes + 1] = words.plain(f.note) end
  notes[#notes + 1] = "A result of the model, not of the machine."
  return svg.page { title = words.plain(f.title), panels = panels, notes = notes, legend = {
    { name = "measured", style = MEASURED }, { name = words.plain(fit.kind), style = 2 } } }
end

-- ---- latencies

-- Count latencies in cells that are alike in ratio, so that rare long ones show beside the rest.
local CELLS = 60
local OFFSET = 0.15 -- height of a single sample

-- What the figure shows of a variant: latencies of the samples whose output was written, in the
-- window; and how many were not written, or written with the sample.
local function written_latencies(f, variant)
  local record = variant.traces[f.index][f.latency_of]
  local kept = { n_lost = 0, n_zero = 0 }
  for i, t in ipairs(record.time) do
    local v = record.latency[i]
    if t >= f.from and t <= f.till then
      if v ~= v or record.written[i] ~= record.written[i] then
        kept.n_lost = kept.n_lost + 1
      elseif v <= 0 then
        kept.n_zero = kept.n_zero + 1
      else
        kept[#kept + 1] = v
      end
    end
  end
  return kept
end

local function latency_range(lists)
  local lo, hi
  for _, list in ipairs(lists) do
    for _, v in ipairs(list) do lo, hi = math.min(lo or v, v), math.max(hi or v, v) end
  end
  lo, hi = (lo or 1e-6) / 1.02, (hi or 1e-5) * 1.02
  local short = math.max(1, math.sqrt(1.2 * lo / hi)) -- a range of at least a fifth
  return lo / short, hi * short
end

-- Marks of a logarithmic time axis: at 1, 2 and 5 times powers of ten, or at the powers alone
-- where there are many; evenly where the axis is short.
local function time_marks(lo, hi)
  local marks, span = {}, math.log(hi / lo, 10)
  if span < 0.5 then
    for i, t in ipairs(svg.ticks(lo, hi, 6)) do marks[i] = { math.log(t, 10), words.time(t) } end
    return marks
  end
  local factors = span <= 2.5 and { 1, 2, 5 } or { 1 }
  for exponent = -12, 7 do
    for _, m in ipairs(factors) do
      local t = m * svg.power_of_ten(exponent)
      if t >= lo and t <= hi then marks[#marks + 1] = { math.log(t, 10), words.time(t) } end
    end
  end
  return marks
end

local function count_marks(top)
  local marks = {}
  for exponent = 0, 15 do
    for _, m in ipairs(top < 2.2 and { 1, 2, 5 } or { 1 }) do
      local n = m * svg.power_of_ten(exponent)
      local height = math.log(n, 10) + OFFSET
      if height <= top then marks[#marks + 1] = { height, ("%.0f"):format(n) } end
    end
  end
  return marks
end

local function bars_of(list, name, style, lo, step)
  local counts, bars = {}, {}
  for _, v in ipairs(list) do
    local cell = math.max(1, math.min(CELLS, math.floor(math.log(v / lo) / step) + 1))
    counts[cell] = (counts[cell] or 0) + 1
  end
  for cell = 1, CELLS do
    if counts[cell] then
      local from, till = lo * math.exp((cell - 1) * step), lo * math.exp(cell * step)
      bars[#bars + 1] = { from = math.log(from, 10), till = math.log(till, 10),
        height = math.log(counts[cell], 10) + OFFSET, style = style,
        name = ("%s: %d of %d from %s to %s"):format(name, counts[cell], #list, words.time(from),
          words.time(till)) }
    end
  end
  return bars
end

local function latencies(f, result)
  local lists, notes = {}, {}
  for v, variant in ipairs(result.variants) do
    lists[v] = written_latencies(f, variant)
    local of = #result.variants > 1 and variant.name or f.latency_of
    if lists[v].n_lost > 0 then
      notes[#notes + 1] = ("%s: %d samples lost, not drawn."):format(of, lists[v].n_lost)
    end
    if lists[v].n_zero > 0 then
      notes[#notes + 1] = ("%s: %d samples written without latency, not drawn."):format(of,
        lists[v].n_zero)
    end
  end
  local lo, hi = latency_range(lists)
  local step, top = math.log(hi / lo) / CELLS, 1
  local p = { x = { math.log(lo, 10), math.log(hi, 10) }, bars = {}, x_marks = time_marks(lo, hi),
    x_label = "latency, logarithmic", y_label = "samples, logarithmic" }
  for v, variant in ipairs(result.variants) do
    local of = #result.variants > 1 and variant.name or f.latency_of
    for _, bar in ipairs(bars_of(lists[v], of, style_of(result, v), lo, step)) do
      top = math.max(top, bar.height)
      p.bars[#p.bars + 1] = bar
    end
  end
  p.y, p.y_marks = { 0, top, flat = true }, count_marks(top)
  return svg.page { title = words.plain(f.title), legend = legend_of(f, result, true),
    panels = { p }, notes = notes_of(f, result, notes) }
end

-- ---- all

-- `name`, or with a number behind it where that is taken; names differ in more than case.
function figure.free_name(name, taken)
  local free, n = name, 1
  while taken[free:lower()] do
    n = n + 1
    free = name .. "-" .. n
  end
  taken[free:lower()] = true
  return free
end

-- A part of a file's name, of plain letters.
local function plain_part(text, others, with)
  return (text:gsub(others, with):sub(1, 60))
end

local function title_name(title)
  local name = plain_part(title:lower(), "[^%w]+", "-"):gsub("^%-+", ""):gsub("%-+$", "")
  return name ~= "" and name or "figure"
end

-- Name of the file of one trace: figure, variant where there are two, signal.
function figure.trace_name(name, variant, signal, taken)
  local parts = { name }
  if variant then parts[2] = plain_part(variant, "[^%w%-%.]+", "_") end
  parts[#parts + 1] = plain_part(signal, "[^%w%-%.]+", "_")
  return figure.free_name(table.concat(parts, "--"), taken)
end

-- The figures of a result: list of { file, text }.
function figure.all(study, result)
  local out, taken = {}, {}
  for i, f in ipairs(study.figures) do
    f.index = i
    local name = figure.free_name(title_name(f.title), taken)
    out[i] = { name = name, file = name .. ".svg",
      text = f.fit and fitted(f) or f.latency_of and latencies(f, result) or
        response(f, result) }
  end
  return out
end

return figure
