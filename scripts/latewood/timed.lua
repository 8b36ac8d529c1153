-- What the analysis of response times says, in words, for `latewood describe`.

local timed = {}

local function us(seconds)
  return ("%.6g us"):format(seconds * 1e6)
end

local function task_line(t, schedulable)
  if not t.response then return ('  "%s": %s'):format(t.name, t.outcome) end
  local line = ('  "%s" responds within %s'):format(t.name, us(t.response))
  if t.deadline then
    line = line .. (", deadline %s: %s"):format(us(t.deadline), t.meets and "met" or "not met")
  end
  if t.job > 1 then line = line .. ("; job %d of its busy period is the worst"):format(t.job) end
  if schedulable and t.slack then
    line = line .. ("; may take %s longer"):format(us(t.slack))
  end
  return line
end

-- Lines for all cores of a rig; none where it has no cores.
function timed.describe(rig, options)
  local lines = {}
  for _, core in ipairs(rig:timed(options)) do
    local head = ('worst response times on "%s", computed from the rig'):format(core.name)
    if not core.analysed then
      head = ('no response times are computed on "%s"'):format(core.name)
    end
    lines[#lines + 1] = head
    for _, t in ipairs(core.tasks) do lines[#lines + 1] = task_line(t, core.schedulable) end
    for _, note in ipairs(core.notes) do lines[#lines + 1] = "  " .. note end
  end
  return lines
end

return timed
