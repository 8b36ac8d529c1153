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

-- Value of one cell: the only run's, or the worst of many.
local function cell(kind, values, judged)
  if #values == 1 then return words.metric(kind, values[1]) end
  if judged then return words.metric(kind, judged.worst) end
  local lo, hi = math.huge, -math.huge
  for _, v in ipairs(values) do
    if v == v then lo, hi = math.min(lo, v), math.max(hi, v) end
  end
  if lo > hi then return "undefined" end
  return words.metric(kind, lo) .. " .. " .. words.metric(kind, hi)
end

local function table_lines(study, result)
  local n, rows = #result.variants, {}
  local head = { "" }
  for v = 1, n do head[v + 1] = result.variants[v].name end
  head[n + 2], head[n + 3] = "limit", ""
  rows[1] = head
  local required = {}
  for r, q in ipairs(study.requirements) do
    local row = { q.name }
    required[q.name] = true
    for v = 1, n do
      row[v + 1] = cell(q.kind, result.variants[v].values[q.name], result.judged[r][v])
    end
    row[n + 2], row[n + 3] = limit_text(q), result.judged[r][n].verdict
    rows[#rows + 1] = row
  end
  for _, m in ipairs(study.metrics) do
    if not required[m[1]] then
      local row = { m[1] }
      for v = 1, n do row[v + 1] = cell(m[2], result.variants[v].values[m[1]]) end
      row[n + 2], row[n + 3] = "", ""
      rows[#rows + 1] = row
    end
  end
  local widths = {}
  for c = 1, n + 3 do
    widths[c] = 0
    for _, row in ipairs(rows) do
      row[c] = words.cut(row[c], c == 1 and 26 or 20)
      widths[c] = math.max(widths[c], words.width(row[c]))
    end
  end
  local lines = {}
  for i, row in ipairs(rows) do
    local parts = {}
    for c = 1, n + 3 do parts[c] = words.pad(row[c], widths[c], c > 1 and c <= n + 1) end
    lines[i] = ("  " .. table.concat(parts, "  ")):gsub("%s+$", "")
  end
  return lines
end

local verdict_words = { met = "MET", ["not met"] = "NOT MET", undecided = "UNDECIDED" }

local function verdict_lines(study, result)
  if not result.verdict then return { "No requirement is stated: nothing is judged." } end
  local met = 0
  for r in ipairs(study.requirements) do
    if result.judged[r][#result.variants].verdict == "met" then met = met + 1 end
  end
  local lines = { ("%s  of the model: %d of %d requirements met%s"):format(
    verdict_words[result.verdict], met, #study.requirements,
    #result.variants > 1 and (" (%s)"):format(result.variants[#result.variants].name) or "") }
  if result.runs > 1 and result.verdict == "met" then
    lines[2] = result.runs < 30 and ("%d runs without a failure are too few to bound how often " ..
      "one fails."):format(result.runs) or
      ("%d runs without a failure: at 95 %% confidence fewer than %.2g %% of runs fail (3/n).")
      :format(result.runs, 300 / result.runs)
  end
  return lines
end

local function trouble_lines(study, result, command)
  local lines = {}
  for _, variant in ipairs(result.variants) do
    for i, e in ipairs(variant.ended) do
      if i == 4 then
        lines[#lines + 1] = ("  ... and %d more"):format(#variant.ended - 3)
        break
      end
      lines[#lines + 1] = ("  %s, run %d ended early: %s"):format(variant.name, e.run, e.message)
    end
  end
  for r, q in ipairs(study.requirements) do
    local j = result.judged[r][#result.variants]
    if j.verdict ~= "met" and j.worst_run then
      lines[#lines + 1] = ("  %s: worst in run %d (%d of %d beyond the limit)%s"):format(q.name,
        j.worst_run, j.failed, result.runs,
        j.worst ~= j.worst and q.kind == "settling time" and "; never settled" or "")
    end
  end
  if #lines > 0 and command then table.insert(lines, 1, "") end
  return lines
end

-- Lines for a person. files: list of names written; folder: where; command: the next one.
function report.lines(study, result, files, folder, command)
  local out = {}
  local function add(lines)
    for _, line in ipairs(lines) do out[#out + 1] = line end
  end
  if study.title then add(words.wrap(study.title, WIDTH)) end
  add { ("%d run%s of %s, seed %d%s"):format(result.runs, result.runs == 1 and "" or "s",
    words.time(study.lasts), result.seed, result.runs > 1 and "; requirements show the worst run" or
    ""), "" }
  if #study.metrics > 0 then add(table_lines(study, result)) end
  add(trouble_lines(study, result, command))
  add { "" }
  add(box(verdict_lines(study, result)))
  if #files > 0 then
    add { "", "results in " .. folder .. "/:" }
    for _, line in ipairs(words.wrap(table.concat(files, ", "), WIDTH - 2)) do
      add { "  " .. line }
    end
  end
  add { "" }
  for _, caution in ipairs(report.cautions) do add(words.wrap(caution, WIDTH)) end
  if command then add { "", "next: " .. command } end
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
    ended[i] = json.ordered({ "run", "status", "message" }, e)
  end
  return json.ordered({ "name", "parameters", "metrics", "ended" }, { name = variant.name,
    parameters = variant.parameters, metrics = json.list(metrics), ended = json.list(ended) })
end

local function requirement_data(q, judged, variants)
  local list = {}
  for v, j in ipairs(judged) do
    list[v] = json.ordered({ "variant", "verdict", "failed", "undecided", "worst", "worst_run" },
      { variant = variants[v].name, verdict = j.verdict, failed = j.failed, undecided = j.unknown,
        worst = j.worst, worst_run = j.worst_run })
  end
  return json.ordered({ "name", "kind", "at_most", "at_least", "variants" }, { name = q.name,
    kind = q.kind, at_most = q.at_most, at_least = q.at_least, variants = json.list(list) })
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
    "lasts", "arguments", "requirements", "variants", "files", "cautions" }, {
    schema = "latewood-run-1", version = lw._VERSION, study = name, title = study.title,
    verdict = result.verdict or "none", of = "the model", runs = result.runs, seed = result.seed,
    lasts = study.lasts, arguments = arguments, requirements = json.list(requirements),
    variants = json.list(variants), files = json.list(files),
    cautions = json.list(report.cautions) })
end

-- An error as data: schema "latewood-error-1".
function report.error_data(code, message)
  return json.ordered({ "schema", "exit_code", "message" },
    { schema = "latewood-error-1", exit_code = code, message = message })
end

return report
