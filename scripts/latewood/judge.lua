-- How requirements stand in a batch.
--
-- Of each requirement and point, from the counts of the ledger:
--   a share is stated     the share of runs that meet the limit is at least that, at the stated
--                         confidence: exact bounds (Clopper and Pearson 1934), one-sided. Runs that
--                         ended early or whose value is undefined do not meet it
--   no share              every run meets it; what n runs without a failure say is shown with it
--   an hourly limit       events per hour of operation, exact bounds (Garwood 1936)
-- Where several requirements state a confidence, each is taken at 1 - (1 - confidence) / m, so that
-- all hold together (Bonferroni). A batch that may stop at checkpoint j spends there
-- 1 / (j (j + 1)) of what it may err with, so that all checkpoints together keep to it.

local lw = require "latewood"

local judge = {}

local S = lw.statistics

-- Kinds whose undefined value means that the limit is missed.
local misses = { ["settling time"] = true, ["rise time"] = true }

local function confident(study)
  local n = 0
  for _, q in ipairs(study.requirements) do
    if q.share or q.per_hour then n = n + 1 end
  end
  return n
end

-- Confidence at which one requirement is judged at a stage (nil: a batch that does not stop early).
function judge.confidence(study, requirement, n_points, stage)
  local alpha = (1 - requirement.confidence) / math.max(1, confident(study) * n_points)
  if stage then alpha = alpha / (stage * (stage + 1)) end
  return 1 - alpha
end

local function by_share(out, q, confidence)
  local met = out.runs - out.missed
  out.interval = { S.proportion(met, out.runs, confidence, "lower"), 1 }
  local _, hi = S.proportion(met, out.runs, confidence, "upper")
  out.interval[2] = hi
  out.proportion = met / out.runs
  out.verdict = out.interval[1] >= q.share and "met" or hi < q.share and "not met" or "undecided"
end

local function by_rate(out, q, confidence, hours)
  if out.ended + out.undefined > 0 then
    out.verdict, out.reason = "undecided", "some runs gave no count"
    return
  end
  out.rate = out.events / hours
  local lo = S.rate(out.events, hours, confidence, "lower")
  local _, hi = S.rate(out.events, hours, confidence, "upper")
  out.interval = { lo, hi }
  out.verdict = hi <= q.per_hour and "met" or lo > q.per_hour and "not met" or "undecided"
end

local function by_every_run(out, q)
  local unknown = misses[q.kind] and 0 or out.undefined
  out.failed, out.unknown = out.missed - unknown, unknown
  out.verdict = out.failed > 0 and "not met" or unknown > 0 and "undecided" or "met"
  if out.verdict == "met" and out.runs > 0 then
    local _, hi = S.proportion(0, out.runs, 0.95, "upper")
    out.failing_below = hi
  end
end

local function sum_of(sample)
  local events = 0
  for k = 1, sample:n() do
    local _, v = sample:at(k)
    if v == v then events = events + v end
  end
  return math.floor(events + 0.5)
end

-- One requirement at one point; `place` of its metric. Worst run only where rows are kept.
function judge.one(study, plan, ledger, place, requirement, point, stage)
  local q = requirement
  local function count(name) return ledger:tally(point.number, name) or 0 end
  local out = { runs = count("runs"), ended = count("ended early"), name = q.name,
    point = point.name, undefined = count(q.name .. ": undefined"),
    missed = q.per_hour and 0 or count(q.name) }
  out.confidence = judge.confidence(study, q, #plan.points, stage)
  out.failed, out.unknown = out.missed, 0
  if out.runs == 0 then
    out.verdict, out.reason = "undecided", "no run"
    return out
  end
  local sample = ledger:kept() ~= "counts" and ledger:column(point.number, place) or nil
  if sample and q.per_hour then out.events = sum_of(sample) end
  if q.share then
    by_share(out, q, out.confidence)
  elseif q.per_hour then
    if ledger:kept() ~= "all" then
      out.verdict, out.reason = "undecided", "rates take a ledger that keeps all rows"
    else
      by_rate(out, q, out.confidence, out.runs * study.lasts / 3600)
    end
  else
    by_every_run(out, q)
  end
  judge.worst(out, q, sample, ledger, point)
  return out
end

-- The run to look at first: one that ended early, else one without a value where that is a miss,
-- else the farthest towards the wrong side.
function judge.worst(out, q, sample, ledger, point)
  if not sample then return end
  local early = ledger:ended(point.number, 1)[1]
  if early then
    out.worst_run, out.worst_ended, out.worst_text = early[1], true, early[3]
    return
  end
  if misses[q.kind] and sample:undefined() > 0 then
    for k = 1, sample:n() do
      local run, v = sample:at(k)
      if v ~= v then
        out.worst, out.worst_run = v, run
        return
      end
    end
  end
  if q.at_least then out.worst, out.worst_run = sample:lowest()
  else out.worst, out.worst_run = sample:highest() end
end

-- All requirements at all points: judged[r][p], and the verdict of the points that decide: those of
-- the last variant.
function judge.all(study, plan, ledger, stage)
  local rank, judged = { met = 0, undecided = 1, ["not met"] = 2 }, {}
  local variants = study.before or study.after
  local last = variants and study.called[2] or "run"
  local verdict = #study.requirements > 0 and "met" or nil
  for r, q in ipairs(study.requirements) do
    local place
    for i, m in ipairs(study.metrics) do
      if m[1] == q.name then place = i end
    end
    judged[r] = {}
    for p, point in ipairs(plan.points) do
      local one = judge.one(study, plan, ledger, place, q, point, stage)
      judged[r][p] = one
      if point.variant == last and rank[one.verdict] > rank[verdict] then verdict = one.verdict end
    end
  end
  return judged, verdict
end

-- Whether a batch may stop at this checkpoint: every requirement with a share or a rate is decided
-- at every point, and some requirement has one.
function judge.settled(study, plan, ledger, stage, limit)
  local decided = false
  for _, q in ipairs(study.requirements) do
    local place
    for i, m in ipairs(study.metrics) do
      if m[1] == q.name then place = i end
    end
    for _, point in ipairs(plan.points) do
      local one = judge.one(study, plan, ledger, place, q, point, stage)
      if q.share or q.per_hour then
        if one.verdict == "undecided" then return false end
        decided = true
      elseif one.verdict == "met" then
        return false -- "every run": only more runs can tell
      end
    end
  end
  return decided and limit > 0
end

return judge
