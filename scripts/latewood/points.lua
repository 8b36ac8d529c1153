-- Points of a batch: each variant at each point of the sweep, with its parameters.
--
-- 1. A point's name and text depend on the study and the command line alone; its number is its
--    place, variants next to each other.
-- 2. Run k of every point sees the same draws: run k of seed.

local lw = require "latewood"
local spread = require "latewood.spread"
local sweep = require "latewood.sweep"
local trial = require "latewood.trial"

local points = {}

local function sorted(t)
  local names = {}
  for k in pairs(t) do names[#names + 1] = tostring(k) end
  table.sort(names)
  return names
end

-- A value as it stands in names and ledgers.
function points.text(value)
  if spread.is(value) then return value.text end
  if type(value) == "number" then return lw.number_text(value) end
  return tostring(value)
end

local function settings_text(settings)
  local parts = {}
  for _, name in ipairs(sorted(settings)) do
    parts[#parts + 1] = name .. "=" .. points.text(settings[name])
  end
  return table.concat(parts, ", ")
end

-- One point: its parameters, or nil and a message.
function points.new(study, arguments, variant, settings, number)
  local own = {}
  for k, v in pairs(variant.own) do own[k] = v end
  for k, v in pairs(settings) do
    if study.given[k] == nil then
      local near = lw.nearest(k, sorted(study.given))
      return nil, ("sweep: the study has no parameter \"%s\"%s"):format(k,
        near and ("; nearest \"%s\""):format(near) or "")
    end
    if own[k] ~= nil then
      return nil, ("sweep: parameter \"%s\" is set by the study's variants too"):format(k)
    end
    own[k] = v
  end
  local p, message = trial.parameters(study, arguments, own)
  if not p then return nil, message end
  local text = settings_text(settings)
  local name = text == "" and variant.name or variant.name .. ", " .. text
  return { number = number, name = name, variant = variant.name, settings = settings,
    parameters = p, text = settings_text(p), varies = spread.varies(p) }
end

-- All points of a study in order, or nil and a message.
function points.of(study, arguments)
  local list = {}
  for _, settings in ipairs(study.sweep and sweep.points(study.sweep) or { {} }) do
    for _, variant in ipairs(trial.variants(study)) do
      local point, message = points.new(study, arguments, variant, settings, #list)
      if not point then return nil, message end
      list[#list + 1] = point
    end
  end
  return list
end

return points
