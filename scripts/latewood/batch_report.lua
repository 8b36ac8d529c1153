-- What a batch says: for the terminal within 80 columns, and as data.

local lw = require "latewood"
local json = require "latewood.json"
local judge = require "latewood.judge"
local report = require "latewood.report"
local words = require "latewood.words"

local batch_report = {}

local WIDTH = 78
local QUANTILES = { 0.01, 0.5, 0.99 }

local function percent(share, digits)
  local text = ("%%.%dg"):format(digits or 5):format(100 * share)
  if text == "100" and share < 1 then text = ("%.9g"):format(100 * share) end
  return text .. " %"
end

local function limit_text(q)
  if q.per_hour then return ("at most %s an hour"):format(lw.number_text(q.per_hour)) end
  local value = q.limit_text or words.metric(q.kind, q.at_most or q.at_least)
  return (q.at_most and "at most " or "at least ") .. value
end

local function condition_text(q)
  if q.share then
    return ("%s in %s of runs (confidence %s)"):format(limit_text(q), percent(q.share),
      percent(q.confidence))
  end
  if q.per_hour then return ("%s (confidence %s)"):format(limit_text(q), percent(q.confidence)) end
  return limit_text(q) .. " in every run"
end

-- How one requirement stands at one point, in words.
local function standing(q, one)
  if one.runs == 0 then return "no run" end
  local parts = {}
  if q.share then
    parts[1] = ("%s of runs, %s at least, %s at most"):format(percent(one.proportion),
      percent(one.interval[1]), percent(one.interval[2]))
  elseif q.per_hour and one.rate then
    parts[1] = ("%.4g an hour, %.4g to %.4g"):format(one.rate, one.interval[1], one.interval[2])
  elseif q.per_hour then
    parts[1] = one.reason
  elseif one.verdict == "met" then
    parts[1] = ("no failure: fewer than %.2g %% of runs fail (confidence 95 %%)"):format(
      100 * one.failing_below)
  else
    local n = one.failed > 0 and one.failed or one.unknown
    parts[1] = ("%d of %d runs %s"):format(n, one.runs, one.failed > 0 and "fail" or
      "give no value")
  end
  if one.worst_ended then
    parts[#parts + 1] = ("run %d ended early"):format(one.worst_run)
  elseif one.worst_run and not q.per_hour then
    parts[#parts + 1] = ("worst %s in run %d"):format(words.metric(q.kind, one.worst),
      one.worst_run)
  end
  return table.concat(parts, "; ")
end

local function requirement_lines(study, plan, judged)
  local lines, named = {}, 0
  for _, point in ipairs(plan.points) do named = math.max(named, words.width(words.plain(point.name))) end
  named = math.min(named, 30)
  for r, q in ipairs(study.requirements) do
    lines[#lines + 1] = ""
    for _, line in ipairs(words.wrap(("%s: %s"):format(words.plain(q.name), condition_text(q)),
      WIDTH - 2)) do
      lines[#lines + 1] = "  " .. line
    end
    for p, point in ipairs(plan.points) do
      local one = judged[r][p]
      local head = ("    %s  %s  "):format(words.pad(words.cut(words.plain(point.name), named),
        named), words.pad(one.verdict, 9))
      local room = WIDTH - words.width(head)
      for i, line in ipairs(words.wrap(standing(q, one), room)) do
        lines[#lines + 1] = (i == 1 and head or (" "):rep(words.width(head))) .. line
      end
    end
  end
  return lines
end

-- Statistics of one metric at one point; nil where no rows are kept.
local function summary(ledger, place, point)
  if ledger:kept() ~= "all" then return nil end
  local sample = ledger:column(point.number, place)
  local s = { runs = sample:n(), undefined = sample:undefined() }
  if s.runs == s.undefined then return s end
  s.mean, s.deviation = sample:mean(), sample:deviation()
  s.lowest, s.lowest_run = sample:lowest()
  s.highest, s.highest_run = sample:highest()
  s.quantiles = {}
  for i, share in ipairs(QUANTILES) do
    local lo, hi = sample:quantile_interval(share, 0.95, "both")
    s.quantiles[i] = { share = share, value = sample:quantile(share), lo = lo, hi = hi }
  end
  return s
end

local MOST_POINTS = 12 -- shown; all are in the JSON and in the ledger

local function metric_lines(study, plan, ledger)
  if ledger:kept() ~= "all" or #study.metrics == 0 then return {} end
  local lines = { "", ("  %s  %10s %10s %10s %10s"):format(words.pad("", 30), "1 %", "median", "99 %",
    "worst") }
  lines[2] = ("  %s%11s%11s%11s%11s"):format(words.pad("values over the runs", 31), "mean", "1 %",
    "median", "99 %")
  for i, m in ipairs(study.metrics) do
    lines[#lines + 1] = "  " .. words.cut(words.plain(m[1]), 60)
    for p, point in ipairs(plan.points) do
      if p > MOST_POINTS then break end
      local s = summary(ledger, i, point)
      local cells = { "undefined", "", "", "" }
      if s.mean then
        cells = { words.metric(m[2], s.mean) }
        for k, q in ipairs(s.quantiles) do cells[k + 1] = words.metric(m[2], q.value) end
      end
      lines[#lines + 1] = ("    %s %10s %10s %10s %10s"):format(words.pad(words.cut(
        words.plain(point.name), 29), 29), table.unpack(cells))
    end
  end
  return lines
end

local function ended_lines(plan, ledger)
  local lines = {}
  for _, point in ipairs(plan.points) do
    local n = ledger:tally(point.number, "ended early") or 0
    if n > 0 then
      local text = ("%s: %d run%s ended early"):format(words.plain(point.name), n,
        n == 1 and "" or "s")
      local first = ledger:ended(point.number, 1)[1]
      if first then text = text .. ("; the first, run %d: %s"):format(first[1], words.plain(first[3])) end
      for i, line in ipairs(words.wrap(text, WIDTH - 4)) do
        lines[#lines + 1] = (i == 1 and "  " or "    ") .. line
      end
    end
  end
  if #lines > 0 then table.insert(lines, 1, "") end
  return lines
end

local verdict_words = { met = "MET", ["not met"] = "NOT MET", undecided = "UNDECIDED" }

local function verdict_lines(study, plan, judged, verdict)
  if not verdict then return { "No requirement is stated: nothing is judged." } end
  local n, met = 0, 0
  local last = (study.before or study.after) and study.called[2] or "run"
  for r in ipairs(study.requirements) do
    for p, point in ipairs(plan.points) do
      if point.variant == last then
        n = n + 1
        if judged[r][p].verdict == "met" then met = met + 1 end
      end
    end
  end
  local lines = { ("%s of the model: %d of %d requirements met%s%s"):format(verdict_words[verdict],
    met, #study.requirements > 0 and n or 0, n > #study.requirements and " over all points" or "",
    (study.before or study.after) and (" (%s)"):format(words.plain(last)) or "") }
  local several = 0
  for _, q in ipairs(study.requirements) do
    if q.share or q.per_hour then several = several + 1 end
  end
  if several * #plan.points > 1 then
    lines[#lines + 1] = ("Bounds hold together: each of %d is taken at its confidence divided " ..
      "among them."):format(several * #plan.points)
  end
  if plan.stage then
    lines[#lines + 1] = ("Judged after %d runs a point, checkpoint %d of a fixed row."):format(
      plan.computed, plan.stage)
  end
  return lines
end

-- Lines for a person. colour: whether the verdict may have one.
function batch_report.lines(study, plan, ledger, judged, verdict, colour)
  local out = {}
  local function add(lines)
    for _, line in ipairs(lines) do out[#out + 1] = line end
  end
  if study.title then add(words.wrap(words.plain(study.title), WIDTH)) end
  add { ("%d runs of %s at %s, seed %d%s"):format(plan.computed, words.time(study.lasts),
    #plan.points == 1 and "one point" or ("each of %d points"):format(#plan.points), plan.seed,
    plan.shard and (", shard %d of %d"):format(plan.shard.number, plan.shard.of) or "") }
  add(requirement_lines(study, plan, judged))
  add(metric_lines(study, plan, ledger))
  if #plan.points > MOST_POINTS then
    add { ("    ... and %d points more, in the JSON and the ledger"):format(#plan.points - MOST_POINTS) }
  end
  add(ended_lines(plan, ledger))
  if plan.lost and plan.lost > 0 then
    add { "", ("  %d worker%s lost on the way; their runs were computed again"):format(plan.lost,
      plan.lost == 1 and " was" or "s were") }
  end
  add { "" }
  add(report.box(verdict_lines(study, plan, judged, verdict), verdict, colour))
  return out
end

-- ---- data

local function one_data(q, one)
  return json.ordered({ "point", "verdict", "runs", "failed", "ended_early", "undefined",
    "proportion", "rate", "interval", "confidence", "failing_below", "worst", "worst_run" }, {
    point = one.point, verdict = one.verdict, runs = one.runs, failed = q.per_hour and nil or
    one.missed, ended_early = one.ended, undefined = one.undefined, proportion = one.proportion,
    rate = one.rate, interval = one.interval and json.list(one.interval) or nil,
    confidence = (q.share or q.per_hour) and one.confidence or nil,
    failing_below = one.failing_below, worst = one.worst, worst_run = one.worst_run })
end

local function metric_data(study, ledger, point)
  local list = {}
  for i, m in ipairs(study.metrics) do
    local s = summary(ledger, i, point) or {}
    local quantiles = {}
    for k, q in ipairs(s.quantiles or {}) do
      quantiles[k] = json.ordered({ "share", "value", "lo", "hi" }, q)
    end
    list[i] = json.ordered({ "name", "kind", "runs", "undefined", "mean", "deviation", "lowest",
      "lowest_run", "highest", "highest_run", "quantiles" }, { name = m[1], kind = m[2],
      runs = s.runs, undefined = s.undefined, mean = s.mean, deviation = s.deviation,
      lowest = s.lowest, lowest_run = s.lowest_run, highest = s.highest,
      highest_run = s.highest_run, quantiles = json.list(quantiles) })
  end
  return json.list(list)
end

-- The batch as data: schema "latewood-batch-1".
function batch_report.data(study, plan, ledger, judged, verdict, name, files)
  local requirements, list, arguments = {}, {}, {}
  for r, q in ipairs(study.requirements) do
    local own = {}
    for p in ipairs(plan.points) do own[p] = one_data(q, judged[r][p]) end
    requirements[r] = json.ordered({ "name", "kind", "at_most", "at_least", "at_most_per_hour",
      "share", "confidence", "points" }, { name = q.name, kind = q.kind, at_most = q.at_most,
      at_least = q.at_least, at_most_per_hour = q.per_hour, share = q.share,
      confidence = (q.share or q.per_hour) and q.confidence or nil, points = json.list(own) })
  end
  for p, point in ipairs(plan.points) do
    list[p] = json.ordered({ "name", "variant", "parameters", "ended_early", "metrics" }, {
      name = point.name, variant = point.variant, parameters = point.text,
      ended_early = ledger:tally(point.number, "ended early"),
      metrics = metric_data(study, ledger, point) })
  end
  for _, a in ipairs(plan.arguments) do arguments[a.name] = a.text end
  return json.ordered({ "schema", "version", "study", "title", "verdict", "of", "runs", "seed",
    "lasts", "arguments", "requirements", "points", "ledger", "files", "cautions" }, {
    schema = "latewood-batch-1", version = lw._VERSION, study = name, title = study.title,
    verdict = verdict or "none", of = "the model", runs = plan.computed, seed = plan.seed,
    lasts = study.lasts, arguments = arguments, requirements = json.list(requirements),
    points = json.list(list), ledger = plan.path, files = json.list(files or {}),
    cautions = json.list(report.cautions) })
end

batch_report.percent = percent
batch_report.condition = condition_text
batch_report.standing = standing
batch_report.judge = judge

return batch_report
