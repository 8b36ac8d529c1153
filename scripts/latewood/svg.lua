-- A small SVG writer: plots with axes, traces, bars, a legend and notes. Styles for light and dark
-- are inside the file; every shape that carries data has a <title>.

local words = require "latewood.words"

local math = require("latewood").math -- the same bits everywhere

local svg = {}

local STYLE = [[
text{font:12px system-ui,sans-serif;fill:#24292f}
.paper{fill:#ffffff}.grid{stroke:#d8dee4;stroke-width:1}.axis{stroke:#57606a;stroke-width:1}
.head{font-size:15px;font-weight:600}.small{font-size:11px;fill:#57606a}
.trace{fill:none;stroke-width:1.6;stroke-linejoin:round}
.s1{stroke:#0072b2}.s2{stroke:#c44e00}.s3{stroke:#57606a}.s4{stroke:#8250a8;stroke-width:1.2}
.b1{fill:#0072b2;fill-opacity:.3;stroke:#0072b2;stroke-dasharray:3 2}
.b2{fill:#c44e00;fill-opacity:.3;stroke:#c44e00}
@media(prefers-color-scheme:dark){
text{fill:#e6edf3}.paper{fill:#0d1117}.grid{stroke:#2b323a}.axis{stroke:#9198a1}
.small{fill:#9198a1}
.s1{stroke:#6cb6ff}.s2{stroke:#ffa657}.s3{stroke:#9198a1}.s4{stroke:#d2a8ff}
.b1{fill:#6cb6ff;stroke:#6cb6ff}.b2{fill:#ffa657;stroke:#ffa657}
}]]

-- Dash patterns beside the colours, so that traces differ without colour.
local dashes = { "7 4", "", "2 3", "9 3 2 3" }

local function dash_of(style)
  return dashes[style] ~= "" and (' stroke-dasharray="%s"'):format(dashes[style]) or ""
end

local function escape(s)
  return (words.plain(s):gsub("[&<>\"']", { ["&"] = "&amp;", ["<"] = "&lt;", [">"] = "&gt;",
    ['"'] = "&quot;", ["'"] = "&#39;" }))
end

function svg.power_of_ten(n)
  local p = 1.0
  for _ = 1, math.abs(n) do p = p * 10 end
  return n < 0 and 1 / p or p
end

-- Tick positions of 1, 2 or 5 times a power of ten, about `n` of them.
function svg.ticks(lo, hi, n)
  local span = hi - lo
  local power = svg.power_of_ten(math.floor(math.log(span / n, 10)))
  local step = power
  for _, m in ipairs { 1, 2, 5, 10 } do
    step = m * power
    if span / step <= n then break end
  end
  local ticks, k = {}, math.ceil(lo / step - 1e-9)
  while k * step <= hi + span * 1e-9 do
    ticks[#ticks + 1] = k * step + 0.0
    k = k + 1
  end
  return ticks
end

-- Name marks { { place, value } } with as many digits as tell them apart.
function svg.named(marks)
  local largest, step = 0, 1
  for i, mark in ipairs(marks) do
    largest = math.max(largest, math.abs(mark[2]))
    if i == 2 then step = math.abs(mark[2] - marks[1][2]) end
  end
  local decimals = math.max(0, math.ceil(-math.log(step, 10) - 1e-9))
  local shape = ("%%.%df"):format(decimals)
  if largest >= 1e6 or decimals > 5 then
    local digits = largest > 0 and math.ceil(math.log(largest / step, 10) - 1e-9) + 2 or 1
    shape = ("%%.%dg"):format(math.max(1, math.min(15, digits)))
  end
  for _, mark in ipairs(marks) do
    local value = math.abs(mark[2]) < 1e-9 * step and 0 or mark[2]
    local name = shape:format(value)
    mark[2] = name:find("%.%d+$") and name:gsub("%.?0+$", "") or name
  end
  return marks
end

local function coordinate(x)
  return (("%.1f"):format(x):gsub("%.0$", ""))
end

-- A panel maps data to a rectangle of the page.
local function panel(box, x_range, y_range)
  local p = { box = box, x = x_range, y = y_range }
  function p.at_x(v) return box.x + (v - x_range[1]) / (x_range[2] - x_range[1]) * box.w end
  function p.at_y(v) return box.y + box.h - (v - y_range[1]) / (y_range[2] - y_range[1]) * box.h end
  return p
end

local function plain_marks(lo, hi, n)
  local marks = {}
  for i, t in ipairs(svg.ticks(lo, hi, n)) do marks[i] = { t, t } end
  return svg.named(marks)
end

local function axes(out, p, q)
  local b = p.box
  for _, mark in ipairs(q.x_marks) do
    local x = coordinate(p.at_x(mark[1]))
    out[#out + 1] = ('<line class="grid" x1="%s" x2="%s" y1="%d" y2="%d"/>'):format(x, x, b.y,
      b.y + b.h)
    out[#out + 1] = ('<text class="small" x="%s" y="%d" text-anchor="middle">%s</text>'):format(x,
      b.y + b.h + 16, escape(mark[2]))
  end
  for _, mark in ipairs(q.y_marks) do
    local y = coordinate(p.at_y(mark[1]))
    out[#out + 1] = ('<line class="grid" x1="%d" x2="%d" y1="%s" y2="%s"/>'):format(b.x, b.x + b.w,
      y, y)
    out[#out + 1] = ('<text class="small" x="%d" y="%s" text-anchor="end">%s</text>'):format(
      b.x - 6, coordinate(p.at_y(mark[1]) + 4), escape(mark[2]))
  end
  out[#out + 1] = ('<path class="axis" fill="none" d="M%d %dV%dH%d"/>'):format(b.x, b.y, b.y + b.h,
    b.x + b.w)
  out[#out + 1] = ('<text class="small" x="%d" y="%d" text-anchor="end">%s</text>'):format(
    b.x + b.w, b.y + b.h + 32, escape(q.x_label))
  out[#out + 1] = ('<text class="small" x="%d" y="%d">%s</text>'):format(b.x, b.y - 7,
    escape(words.cut(q.y_label, 100)))
end

-- Points of a polyline, in tenths of a pixel; points along a level line are left out.
local function pen()
  local xs, ys, n = {}, {}, 0
  local function to(x, y)
    if n > 1 and ys[n] == y and ys[n - 1] == y then
      xs[n] = x
    elseif n == 0 or xs[n] ~= x or ys[n] ~= y then
      n = n + 1
      xs[n], ys[n] = x, y
    end
  end
  local function text()
    local parts = {}
    for i = 1, n do parts[i] = coordinate(xs[i] / 10) .. " " .. coordinate(ys[i] / 10) end
    return table.concat(parts, " ")
  end
  return to, text
end

-- Least and largest of each column of half a pixel, in the order of time, so that no peak is lost.
local function reduce(p, xs, ys)
  local to, text = pen()
  local x_scale, x_from = 10 * p.box.w / (p.x[2] - p.x[1]), p.x[1]
  local y_scale, y_from = 10 * p.box.h / (p.y[2] - p.y[1]), p.y[1]
  local left, base = 10 * p.box.x, 10 * (p.box.y + p.box.h)
  local lo, hi = p.y[1], p.y[2]
  local column, first, least, most, last
  local function flush()
    if not column then return end
    local falls = first > last -- visited the short way, so that dashes keep their length
    to(column, first)
    to(column, falls and most or least)
    to(column, falls and least or most)
    to(column, last)
  end
  for i = 1, #xs do
    local y = ys[i]
    if y == y then
      y = y < lo and lo or y > hi and hi or y -- along the edge where the axis ends
      local at = (left + (xs[i] - x_from) * x_scale) // 5 * 5
      y = (base - (y - y_from) * y_scale + 0.5) // 1
      if at ~= column then
        flush()
        column, first, least, most = at, y, y, y
      end
      if y < least then least = y end
      if y > most then most = y end
      last = y
    end
  end
  flush()
  return text()
end

local function draw_trace(out, p, trace)
  local points = reduce(p, trace.x, trace.y)
  if points == "" then return end
  out[#out + 1] = ('<polyline class="trace s%d"%s points="%s"><title>%s</title></polyline>'):format(
    trace.style, dash_of(trace.style), points, escape(trace.name))
end

local function draw_limits(out, p, limits)
  local b = p.box
  for _, limit in ipairs(limits) do
    local y = coordinate(p.at_y(limit))
    out[#out + 1] = ('<path class="trace s4"%s d="M%d %sH%d"><title>band: %.6g</title></path>')
      :format(dash_of(4), b.x, y, b.x + b.w, limit)
  end
end

local function draw_bars(out, p, bars)
  local base = p.at_y(p.y[1])
  for _, bar in ipairs(bars) do
    local x1, x2, y = p.at_x(bar.from), p.at_x(bar.till), p.at_y(bar.height)
    if base - y >= 0.05 then
      out[#out + 1] = ('<rect class="b%d" x="%s" y="%s" width="%s" height="%s">'):format(bar.style,
        coordinate(x1), coordinate(y), coordinate(math.max(x2 - x1, 0.6)), coordinate(base - y)) ..
        "<title>" .. escape(bar.name) .. "</title></rect>"
    end
  end
end

local LETTER = 7.2 -- width of a letter, about

-- The legend in rows; returns how many.
local function draw_legend(out, entries, left, y, right)
  local x, n_rows = left, #entries > 0 and 1 or 0
  for _, e in ipairs(entries) do
    local name = words.cut(words.plain(e.name), 90)
    local width = 34 + math.floor(LETTER * words.width(name))
    if x > left and x + width > right then
      x, y, n_rows = left, y + 18, n_rows + 1
    end
    if e.is_bar then
      out[#out + 1] = ('<rect class="b%d" x="%d" y="%d" width="28" height="9"/>'):format(e.style, x,
        y - 9)
    else
      out[#out + 1] = ('<line class="trace s%d"%s x1="%d" x2="%d" y1="%d" y2="%d"/>'):format(
        e.style, dash_of(e.style), x, x + 28, y - 4, y - 4)
    end
    out[#out + 1] = ('<text x="%d" y="%d">%s</text>'):format(x + 34, y, escape(name))
    x = x + width + 24
  end
  return n_rows
end

local function padded(range)
  local lo, hi = range[1], range[2]
  local size = math.max(math.abs(lo), math.abs(hi))
  if hi - lo <= 1e-9 * size or hi <= lo then
    local d = size > 0 and size * 0.1 or 1
    return { lo - d, hi + d }
  end
  local d = (hi - lo) * 0.06
  return { lo - (range.flat and 0 or d), hi + d }
end

-- Room that the marks of the vertical axes need.
local function left_of(panels)
  local longest = 8
  for _, q in ipairs(panels) do
    for _, mark in ipairs(q.y_marks) do longest = math.max(longest, words.width(mark[2])) end
  end
  return 14 + math.ceil(longest * 7)
end

-- A page of panels stacked over one another.
--   page: title, legend = { { name, style, is_bar } }, notes = { text },
--         panels = { { x_label, y_label, x = {lo, hi}, y = {lo, hi}, traces = {}, bars = {},
--                      limits = { value }, x_marks, y_marks = { { value, text } } } }
--   trace: name, style, x = {}, y = {}      bar: from, till, height, name, style
function svg.page(page)
  local WIDTH, RIGHT, HEIGHT, GAP = 820, 20, 190, 62
  for _, q in ipairs(page.panels) do
    q.y = padded(q.y)
    q.y_marks = q.y_marks or plain_marks(q.y[1], q.y[2], 5)
  end
  local left, body = left_of(page.panels), {}
  local n_rows = draw_legend(body, page.legend, 20, 48, WIDTH - RIGHT)
  local top = 60 + 18 * n_rows
  local height = top + #page.panels * (HEIGHT + GAP) + #page.notes * 16
  for i, q in ipairs(page.panels) do
    local p = panel({ x = left, y = top + (i - 1) * (HEIGHT + GAP), w = WIDTH - left - RIGHT,
      h = HEIGHT }, q.x, q.y)
    axes(body, p, q)
    draw_limits(body, p, q.limits or {})
    draw_bars(body, p, q.bars or {})
    for _, trace in ipairs(q.traces or {}) do draw_trace(body, p, trace) end
  end
  for i, note in ipairs(page.notes) do
    body[#body + 1] = ('<text class="small" x="20" y="%d">%s</text>'):format(
      height - (#page.notes - i) * 16 - 8, escape(note))
  end
  local title = escape(words.cut(page.title, 88))
  return table.concat({
    ('<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %d %d" role="img" aria-label="%s">')
      :format(WIDTH, height, escape(page.title)),
    ("<title>%s</title>"):format(escape(page.title)),
    "<style>" .. STYLE .. "</style>",
    ('<rect class="paper" width="%d" height="%d"/>'):format(WIDTH, height),
    ('<text class="head" x="20" y="26">%s</text>'):format(title),
    table.concat(body, "\n"),
    "</svg>\n",
  }, "\n")
end

return svg
