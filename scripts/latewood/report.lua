-- What a study says: for the terminal within 80 columns, and as data for JSON.

local lw = require "latewood"
local json = require "latewood.json"
local words = require "latewood.words"

local report = {}

local WIDTH = 78

report.cautions = {
  "Results describe the model, not the machine; measured maxima are the worst seen.",
  "Motor drives, converters and moving axes can injure and burn: try changes first with limited " ..
    "current and energy, guards and an emergency stop, under the local electrical and machinery " ..
    "codes and the judgement of qualified people.",
  "A passed study is no functional-safety assessment.",
}

local function rule(left, fill, right)
  return left .. fill:rep(WIDTH - 2) .. right
end

local function box(lines)
  local out = { rule("+", "-", "+") }
  for _, line in ipairs(lines) do
    for _, part in ipairs(words.wrap(line, WIDTH - 4)) do
      out[#out + 1] = "| " .. words.pad(part, WIDTH - 4) .. " |"
    end
  end
  out[#out + 1] = rule("+", "-", "+")
  return out
end

local function limit_text(requirement)
  local value = requirement.limit_text or -- as the study has it, with its unit
    words.metric(requirement.kind, requirement.at_most or requirement.at_least)
  return (requirement.at_most and "at most " or "at least ") .. value
end

-- Value of one cell: the only run's, or the worst of many; without a requirement their range.
local function cell(kind, variant, name, judged)
  local values = variant.values[name]
  if judged then
    return judged.worst_ended and "ended early" or words.metric(kind, judged.worst)
  end
  if #values == 1 then
    return #variant.ended > 0 and "ended early" or words.metric(kind, values[1])
  end
  local lo, hi = math.huge, -math.huge
  for _, v in ipairs(values) do
    if v == v then lo, hi = math.min(lo, v), math.max(hi, v) end
  end
  if lo > hi then return "undefined" end
  return words.metric(kind, lo) .. " .. " .. words.metric(kind, hi)
end

local function table_rows(study, result)
  local n, required = #result.variants, {}
  local head = { "" }
  for v = 1, n do head[v + 1] = n == 1 and "" or words.plain(result.variants[v].name) end
  head[n + 2], head[n + 3] = #study.requirements > 0 and "limit" or "", ""
  local rows = { head }
  for r, q in ipairs(study.requirements) do
    local row = { words.plain(q.name) }
    required[q.name] = true
    for v = 1, n do row[v + 1] = cell(q.kind, result.variants[v], q.name, result.judged[r][v]) end
    row[n + 2], row[n + 3] = words.plain(limit_text(q)), result.judged[r][n].verdict
    rows[#rows + 1] = row
  end
  for _, m in ipairs(study.metrics) do
    if not required[m[1]] then
      local row = { words.plain(m[1]) }
      for v = 1, n do row[v + 1] = cell(m[2], result.variants[v], m[1]) end
      row[n + 2], row[n + 3] = "", ""
      rows[#rows + 1] = row
    end
  end
  return rows
end

-- Widths of the columns: what the widest entry needs, the names cut where the lines grow too long.
-- Values and verdicts are never cut.
local function column_widths(rows, n)
  local widths, needed = {}, {}
  for c = 1, n + 3 do
    widths[c], needed[c] = 0, 0
    for i, row in ipairs(rows) do
      widths[c] = math.max(widths[c], words.width(row[c]))
      if i > 1 then needed[c] = math.max(needed[c], words.width(row[c])) end
    end
  end
  needed[1], needed[n + 2] = 8, 12
  local total = 2 * (n + 3)
  for c = 1, n + 3 do total = total + widths[c] end
  local order = { 1 }
  for c = 2, n + 2 do order[c] = c end
  for _, c in ipairs(order) do
    local cut = math.max(0, math.min(total - WIDTH, widths[c] - math.max(needed[c], 5)))
    widths[c], total = widths[c] - cut, total - cut
  end
  return widths
end

local function table_lines(study, result)
  local n, rows = #result.variants, table_rows(study, result)
  local widths, lines = column_widths(rows, n), {}
  for i, row in ipairs(rows) do
    local parts = {}
    for c = 1, n + 3 do
      parts[c] = words.pad(words.cut(row[c], widths[c]), widths[c], c > 1 and c <= n + 1)
    end
    lines[#lines + 1] = ("  " .. table.concat(parts, "  ")):gsub("%s+$", "")
    if lines[#lines] == "" and i == 1 then lines[#lines] = nil end
  end
  return lines
end

local verdict_words = { met = "MET", ["not met"] = "NOT MET", undecided = "UNDECIDED" }

-- What no failure in n runs says.
local function bound_text(result)
  if result.failing_below >= 1 then
    return ("%d runs without a failure are too few to say how often one fails."):format(result.runs)
  end
  return ("%d runs without a failure: at 95 %% confidence fewer than %.2g %% of runs fail (3/n).")
    :format(result.runs, 100 * result.failing_below)
end

local function verdict_lines(study, result)
  if not result.verdict then return { "No requirement is stated: nothing is judged." } end
  local met, last = 0, result.variants[#result.variants]
  for r in ipairs(study.requirements) do
    if result.judged[r][#result.variants].verdict == "met" then met = met + 1 end
  end
  local lines = { ("%s of the model: %d of %d requirements met%s"):format(
    verdict_words[result.verdict], met, #study.requirements,
    #result.variants > 1 and (" (%s)"):format(words.plain(last.name)) or "") }
  if result.failing_below then lines[2] = bound_text(result) end
  return lines
end

-- Why a requirement is not met, or not decided.
local function reason_text(q, judged, runs)
  local n = judged.failed > 0 and judged.failed or judged.unknown
  local text = ("%s: %s"):format(words.plain(q.name), judged.reason)
  if judged.reason == "never settled" then text = text .. ", which counts as not met" end
  if runs > 1 then
    local times = n == 1 and "1 run" or ("%d runs"):format(n)
    text = ("%s; %s of %d, worst in run %d"):format(text, times, runs, judged.worst_run)
  end
  return text
end

local function trouble_lines(study, result)
  local lines = {}
  local function add(text)
    for i, line in ipairs(words.wrap(text, WIDTH - 4)) do
      lines[#lines + 1] = (i == 1 and "  " or "    ") .. line
    end
  end
  for _, variant in ipairs(result.variants) do
    local name = #result.variants > 1 and words.plain(variant.name) .. ", " or ""
    for i, e in ipairs(variant.ended) do
      if i == 4 then
        add(("... and %d runs more"):format(#variant.ended - 3))
        break
      end
      add(("%srun %d ended early: %s"):format(name, e.run, words.plain(e.message)))
    end
  end
  for r, q in ipairs(study.requirements) do
    local j = result.judged[r][#result.variants]
    if j.verdict ~= "met" then add(reason_text(q, j, result.runs)) end
  end
  if #lines > 0 then table.insert(lines, 1, "") end
  return lines
end

local colours = { met = "34", ["not met"] = "31", undecided = "33" } -- blue, red, yellow

local function coloured(line, verdict)
  local word = verdict_words[verdict]
  return (line:gsub("^| " .. word, "| \27[1;" .. colours[verdict] .. "m" .. word .. "\27[0m", 1))
end

-- Lines in a box, the verdict in the first of them coloured where it may be.
function report.box(lines, verdict, colour)
  local out = box(lines)
  if colour and verdict then out[2] = coloured(out[2], verdict) end
  return out
end

-- Lines for a person: what the study says. colour: whether the verdict may have one.
function report.lines(study, result, colour)
  local out = {}
  local function add(lines)
    for _, line in ipairs(lines) do out[#out + 1] = line end
  end
  if study.title then add(words.wrap(words.plain(study.title), WIDTH)) end
  add { ("%d run%s of %s, seed %d%s"):format(result.runs, result.runs == 1 and "" or "s",
    words.time(study.lasts), result.seed, result.runs > 1 and "; requirements show the worst run" or
    "") }
  if #study.metrics > 0 then
    add { "" }
    add(table_lines(study, result))
  end
  add(trouble_lines(study, result))
  add { "" }
  add(report.box(verdict_lines(study, result), result.verdict, colour))
  return out
end

-- Lines that follow: the files written, cautions, the next command.
function report.closing(files, folder, command)
  local shown, out = {}, {}
  for _, f in ipairs(files) do
    if not f:find("%.csv$") then shown[#shown + 1] = f end
  end
  if #files > #shown then shown[#shown + 1] = ("%d CSV files"):format(#files - #shown) end
  out[1], out[2] = "", "results in " .. folder .. "/:"
  for _, line in ipairs(words.wrap(table.concat(shown, ", "), WIDTH - 2)) do
    out[#out + 1] = "  " .. line
  end
  out[#out + 1] = ""
  for _, caution in ipairs(report.cautions) do
    for _, line in ipairs(words.wrap(caution, WIDTH)) do out[#out + 1] = line end
  end
  out[#out + 1] = ""
  out[#out + 1] = "next: " .. command
  return out
end

local function numbers(values)
  local list = {}
  for i, v in ipairs(values) do list[i] = v end
  return json.list(list)
end

local function variant_data(study, variant)
  local metrics, ended = {}, {}
  for i, m in ipairs(study.metrics) do
    metrics[i] = json.ordered({ "name", "kind", "values" },
      { name = m[1], kind = m[2], values = numbers(variant.values[m[1]]) })
  end
  for i, e in ipairs(variant.ended) do
    ended[i] = json.ordered({ "run", "status", "at", "message" }, e)
  end
  return json.ordered({ "name", "parameters", "metrics", "ended" }, { name = variant.name,
    parameters = variant.parameters, metrics = json.list(metrics), ended = json.list(ended) })
end

local function requirement_data(q, judged, variants)
  local list = {}
  for v, j in ipairs(judged) do
    list[v] = json.ordered({ "variant", "verdict", "reason", "failed", "undecided", "worst",
      "worst_run" }, { variant = variants[v].name, verdict = j.verdict, reason = j.reason,
      failed = j.failed, undecided = j.unknown, worst = j.worst, worst_run = j.worst_run })
  end
  return json.ordered({ "name", "kind", "at_most", "at_least", "variants" }, { name = q.name,
    kind = q.kind, at_most = q.at_most, at_least = q.at_least, variants = json.list(list) })
end

-- What no failure in n runs says: with this confidence, fewer than this share of runs fail.
local function bound_data(result)
  if not result.failing_below then return nil end
  return json.ordered({ "confidence", "failing_below" }, { confidence = 0.95,
    failing_below = result.failing_below })
end

-- The whole result as data: schema "latewood-run-1".
function report.data(study, result, name, files)
  local variants, requirements, arguments = {}, {}, {}
  for i, v in ipairs(result.variants) do variants[i] = variant_data(study, v) end
  for i, q in ipairs(study.requirements) do
    requirements[i] = requirement_data(q, result.judged[i], result.variants)
  end
  for _, a in ipairs(result.arguments) do arguments[a.name] = a.text end
  return json.ordered({ "schema", "version", "study", "title", "verdict", "of", "runs", "seed",
    "lasts", "arguments", "bound", "requirements", "variants", "files", "cautions" }, {
    schema = "latewood-run-1", version = lw._VERSION, study = name, title = study.title,
    verdict = result.verdict or "none", of = "the model", runs = result.runs, seed = result.seed,
    lasts = study.lasts, arguments = arguments, bound = bound_data(result),
    requirements = json.list(requirements), variants = json.list(variants),
    files = json.list(files), cautions = json.list(report.cautions) })
end

-- An error as data: schema "latewood-error-1".
function report.error_data(code, message)
  return json.ordered({ "schema", "exit_code", "message" },
    { schema = "latewood-error-1", exit_code = code, message = message })
end

return report
