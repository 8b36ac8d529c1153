-- Figures of a study: responses of the variants over one another, and latencies as histograms.

local svg = require "latewood.svg"
local words = require "latewood.words"

local math = require("latewood").math -- the same bits everywhere

local figure = {}

local MODEL = "A result of the model, not of the machine."

local function notes_of(f)
  local notes = {}
  if f.note then
    for _, line in ipairs(words.wrap(f.note, 118)) do notes[#notes + 1] = line end
  end
  notes[#notes + 1] = MODEL
  return notes
end

local function extend(range, ys)
  for _, y in ipairs(ys) do
    if y == y and math.abs(y) ~= math.huge then
      range[1] = math.min(range[1] or y, y)
      range[2] = math.max(range[2] or y, y)
    end
  end
end

local function scaled(xs, size)
  local out = {}
  for i, x in ipairs(xs) do out[i] = x / size end
  return out
end

-- The unit of a panel: `unit` is a list, one for each signal, or that of the first.
local function unit_of(f, index)
  local unit = type(f.unit) == "table" and f.unit[index] or index == 1 and f.unit
  return unit and " / " .. unit or ""
end

-- Traces of one signal in all variants, with the wanted value under the first.
local function response_panel(f, index, signal, result, size, unit)
  local p = { x = { f.from / size, f.till / size }, y = {}, traces = {},
    x_label = "time / " .. unit, y_label = signal .. unit_of(f, index) }
  local function add(record, name, style)
    extend(p.y, record.value)
    p.traces[#p.traces + 1] = { name = name, style = style, x = scaled(record.time, size),
      y = record.value }
  end
  if f.wanted and index == 1 then
    add(result.variants[#result.variants].traces[f.index][f.wanted], f.wanted, 3)
  end
  for v, variant in ipairs(result.variants) do
    add(variant.traces[f.index][signal], signal .. ", " .. variant.name,
      #result.variants == 1 and 2 or v)
  end
  if not p.y[1] then p.y = { 0, 1 } end
  return p
end

local function legend_of(f, result)
  local legend = {}
  for v, variant in ipairs(result.variants) do
    legend[v] = { name = #result.variants == 1 and f.of and f.of[1] or variant.name,
      style = #result.variants == 1 and 2 or v }
  end
  if f.wanted then legend[#legend + 1] = { name = f.wanted, style = 3 } end
  return legend
end

local function response(f, result)
  local size, unit = words.time_unit(f.till)
  local panels = {}
  for i, signal in ipairs(f.of) do
    panels[i] = response_panel(f, i, signal, result, size, unit)
  end
  return svg.page { title = f.title, legend = legend_of(f, result), panels = panels,
    notes = notes_of(f) }
end

-- Count latencies in cells that are alike in ratio, so that rare long ones show beside the rest.
local CELLS = 60
local OFFSET = 0.15 -- height of a single sample

local function histogram(values, lo, step)
  local counts, n = {}, 0
  for _, v in ipairs(values) do
    if v == v then
      local cell = math.floor(math.log(v / lo) / step) + 1
      cell = math.max(1, math.min(CELLS, cell))
      counts[cell] = (counts[cell] or 0) + 1
      n = n + 1
    end
  end
  return counts, n
end

local function latency_range(f, result)
  local lo, hi
  for _, variant in ipairs(result.variants) do
    for _, v in ipairs(variant.traces[f.index][f.latency_of].latency) do
      if v == v and v > 0 then
        lo, hi = math.min(lo or v, v), math.max(hi or v, v)
      end
    end
  end
  lo, hi = (lo or 1e-6) * 0.98, (hi or 1e-5) * 1.02
  return lo, math.max(hi, lo * 1.5)
end

-- Marks of a logarithmic time axis at 1, 2 and 5 times powers of ten.
local function time_marks(lo, hi)
  local marks, power = {}, 1e-12
  while power < hi do
    for _, m in ipairs { 1, 2, 5 } do
      local t = m * power
      if t >= lo and t <= hi then marks[#marks + 1] = { math.log(t, 10), words.time(t) } end
    end
    power = power * 10
  end
  return marks
end

local function count_marks(top)
  local marks, n = {}, 1
  while math.log(n, 10) + OFFSET <= top do
    marks[#marks + 1] = { math.log(n, 10) + OFFSET, ("%d"):format(n) }
    n = n * 10
  end
  return marks
end

local function latencies(f, result)
  local lo, hi = latency_range(f, result)
  local step = math.log(hi / lo) / CELLS
  local p = { x = { math.log(lo, 10), math.log(hi, 10) }, y = { 0, 1, flat = true }, bars = {},
    x_marks = time_marks(lo, hi), x_label = "latency, logarithmic",
    y_label = "samples, logarithmic" }
  local top = 1
  for v, variant in ipairs(result.variants) do
    local counts, n = histogram(variant.traces[f.index][f.latency_of].latency, lo, step)
    for cell, count in pairs(counts) do
      local from, till = lo * math.exp((cell - 1) * step), lo * math.exp(cell * step)
      local height = math.log(count, 10) + OFFSET
      top = math.max(top, height)
      p.bars[#p.bars + 1] = { from = math.log(from, 10), till = math.log(till, 10),
        height = height, style = #result.variants == 1 and 2 or v, cell = cell, v = v,
        name = ("%s: %d of %d from %s to %s"):format(variant.name, count, n, words.time(from),
          words.time(till)) }
    end
  end
  table.sort(p.bars, function(a, b)
    if a.v ~= b.v then return a.v < b.v end
    return a.cell < b.cell
  end)
  p.y[2] = top
  p.y_marks = count_marks(top)
  return svg.page { title = f.title, legend = legend_of(f, result), panels = { p },
    notes = notes_of(f) }
end

-- The figures of a result: list of { file, text }.
function figure.all(study, result)
  local out = {}
  for i, f in ipairs(study.figures) do
    f.index = i
    local file = f.title:lower():gsub("[^%w]+", "-"):gsub("^%-+", ""):gsub("%-+$", "")
    if file == "" or out[file] then file = ("%s-%d"):format(file, i) end
    out[#out + 1] = { file = file .. ".svg", title = f.title,
      text = f.latency_of and latencies(f, result) or response(f, result) }
  end
  return out
end

return figure
