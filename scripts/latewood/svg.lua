-- A small SVG writer: plots with axes, traces, bars, a legend and notes. Styles for light and dark
-- are inside the file; every shape that carries data has a <title>.

local math = require("latewood").math -- the same bits everywhere

local svg = {}

local STYLE = [[
text{font:12px system-ui,sans-serif;fill:#24292f}
.paper{fill:#ffffff}.grid{stroke:#d8dee4;stroke-width:1}.axis{stroke:#57606a;stroke-width:1}
.head{font-size:15px;font-weight:600}.small{font-size:11px;fill:#57606a}
.trace{fill:none;stroke-width:1.6;stroke-linejoin:round}
.s1{stroke:#0072b2}.s2{stroke:#c44e00}.s3{stroke:#57606a}
.b1{fill:#0072b2;fill-opacity:.35;stroke:#0072b2}.b2{fill:#c44e00;fill-opacity:.35;stroke:#c44e00}
.limit{stroke:#a40e26;stroke-width:1;stroke-dasharray:2 3}
@media(prefers-color-scheme:dark){
text{fill:#e6edf3}.paper{fill:#0d1117}.grid{stroke:#2b323a}.axis{stroke:#9198a1}
.small{fill:#9198a1}
.s1{stroke:#6cb6ff}.s2{stroke:#ffa657}.s3{stroke:#9198a1}
.b1{fill:#6cb6ff;stroke:#6cb6ff}.b2{fill:#ffa657;stroke:#ffa657}.limit{stroke:#ff7b72}
}]]

-- Dash patterns beside the colours, so that traces differ without colour.
svg.dashes = { "7 4", "", "2 3" }

local function escape(s)
  return (tostring(s):gsub("[&<>\"']", { ["&"] = "&amp;", ["<"] = "&lt;", [">"] = "&gt;",
    ['"'] = "&quot;", ["'"] = "&#39;" }))
end
svg.escape = escape

local function power_of_ten(n)
  local p = 1.0
  for _ = 1, math.abs(n) do p = p * 10 end
  return n < 0 and 1 / p or p
end

-- Tick positions of 1, 2 or 5 times a power of ten, about `n` of them.
function svg.ticks(lo, hi, n)
  local span = hi - lo
  local power = power_of_ten(math.floor(math.log(span / n, 10)))
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

local function short(x)
  if math.abs(x) < 1e-12 then return "0" end
  return ("%.6g"):format(x)
end

local function coordinate(x)
  return ("%.1f"):format(x):gsub("%.0$", "")
end

-- A panel maps data to a rectangle of the page.
local function panel(box, x_range, y_range)
  local p = { box = box, x = x_range, y = y_range }
  function p.at_x(v) return box.x + (v - x_range[1]) / (x_range[2] - x_range[1]) * box.w end
  function p.at_y(v) return box.y + box.h - (v - y_range[1]) / (y_range[2] - y_range[1]) * box.h end
  return p
end

-- Marks of an axis: those the panel brings, or plain ones.
local function marks_of(own, lo, hi, n)
  if own then return own end
  local marks = {}
  for i, t in ipairs(svg.ticks(lo, hi, n)) do marks[i] = { t, short(t) } end
  return marks
end

local function axes(out, p, q)
  local b = p.box
  for _, mark in ipairs(marks_of(q.x_marks, p.x[1], p.x[2], 8)) do
    local x = coordinate(p.at_x(mark[1]))
    out[#out + 1] = ('<line class="grid" x1="%s" x2="%s" y1="%d" y2="%d"/>'):format(x, x, b.y,
      b.y + b.h)
    out[#out + 1] = ('<text class="small" x="%s" y="%d" text-anchor="middle">%s</text>'):format(x,
      b.y + b.h + 16, escape(mark[2]))
  end
  for _, mark in ipairs(marks_of(q.y_marks, p.y[1], p.y[2], 5)) do
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
    escape(q.y_label))
end

-- Least and largest of each pixel column, in the order of time, so that no peak is lost.
local function reduce(p, xs, ys)
  local points, column, first, least, most, last = {}, nil, nil, nil, nil, nil
  local function flush()
    if not column then return end
    for _, y in ipairs { first, least, most, last } do
      local text = coordinate(column) .. " " .. coordinate(p.at_y(y))
      if points[#points] ~= text then points[#points + 1] = text end
    end
  end
  for i = 1, #xs do
    local x, y = math.floor(p.at_x(xs[i]) * 2) / 2, ys[i]
    if y == y and math.abs(y) ~= math.huge then
      if x ~= column then
        flush()
        column, first, least, most = x, y, y, y
      end
      least, most, last = math.min(least, y), math.max(most, y), y
    end
  end
  flush()
  return points
end

local function draw_trace(out, p, trace)
  local points = reduce(p, trace.x, trace.y)
  if #points == 0 then return end
  local dash = svg.dashes[trace.style]
  out[#out + 1] = ('<polyline class="trace s%d"%s points="%s"><title>%s</title></polyline>'):format(
    trace.style, dash ~= "" and (' stroke-dasharray="%s"'):format(dash) or "",
    table.concat(points, " "), escape(trace.name))
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

local function draw_legend(out, entries, x, y)
  for _, e in ipairs(entries) do
    local dash = svg.dashes[e.style]
    out[#out + 1] = ('<line class="trace s%d"%s x1="%d" x2="%d" y1="%d" y2="%d"/>'):format(e.style,
      dash ~= "" and (' stroke-dasharray="%s"'):format(dash) or "", x, x + 28, y - 4, y - 4)
    out[#out + 1] = ('<text x="%d" y="%d">%s</text>'):format(x + 34, y, escape(e.name))
    x = x + 34 + 7.2 * (utf8.len(e.name) or #e.name) // 1 + 24
  end
end

local function padded(range)
  local lo, hi = range[1], range[2]
  if hi <= lo then
    local d = math.max(math.abs(hi) * 0.1, 1e-9)
    return { lo - d, hi + d }
  end
  local d = (hi - lo) * 0.06
  return { lo - (range.flat and 0 or d), hi + d }
end

-- A page of panels stacked over one another.
--   page: title, legend = { { name, style } }, notes = { text },
--         panels = { { x_label, y_label, x = {lo, hi}, y = {lo, hi}, traces = {}, bars = {},
--                      x_marks, y_marks = { { value, text } } } }
--   trace: name, style, x = {}, y = {}      bar: from, till, height, name, style
function svg.page(page)
  local WIDTH, LEFT, RIGHT, HEIGHT, GAP = 820, 70, 20, 190, 62
  local top = 78
  local height = top + #page.panels * (HEIGHT + GAP) + #page.notes * 16
  local out = {
    ('<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %d %d" role="img" aria-label="%s">')
      :format(WIDTH, height, escape(page.title)),
    ("<title>%s</title>"):format(escape(page.title)),
    "<style>" .. STYLE .. "</style>",
    ('<rect class="paper" width="%d" height="%d"/>'):format(WIDTH, height),
    ('<text class="head" x="20" y="26">%s</text>'):format(escape(page.title)),
  }
  draw_legend(out, page.legend, 20, 48)
  for i, q in ipairs(page.panels) do
    local box = { x = LEFT, y = top + (i - 1) * (HEIGHT + GAP), w = WIDTH - LEFT - RIGHT,
      h = HEIGHT }
    local p = panel(box, q.x, padded(q.y))
    axes(out, p, q)
    draw_bars(out, p, q.bars or {})
    for _, trace in ipairs(q.traces or {}) do draw_trace(out, p, trace) end
  end
  for i, note in ipairs(page.notes) do
    out[#out + 1] = ('<text class="small" x="20" y="%d">%s</text>'):format(
      height - (#page.notes - i) * 16 - 8, escape(note))
  end
  out[#out + 1] = "</svg>\n"
  return table.concat(out, "\n")
end

return svg
