-- What the Lua suites share: chunks with lines to point at, and a small loop.

local harness = require "harness"
local lw = require "latewood"

local coil = {}

-- Run a chunk named mount.lua, so that messages have lines to point at.
function coil.mount(text)
  return assert(load("local lw = ...\n" .. text, "=mount.lua"))(lw)
end

-- The chunk raises a message with these texts; its first line of text is mount.lua:2.
function coil.refuses(text, ...)
  return harness.raises(function() coil.mount(text) end, ...)
end

-- A coil without resistance, a law, and what stands between them.
function coil.loop(options)
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.integrator { gain = 1 / options.inductance, inputs = { "voltage" },
    outputs = { "current" } } }
  rig:adc { "current", of = "coil.current", every = options.period }
  rig:dac { "bridge", to = "coil.voltage", latch = options.latch }
  rig:loop { "control", law = options.law, wanted = options.wanted, measured = "current",
    output = "bridge", latency = options.latency }
  return rig
end

function coil.run(options)
  return coil.loop(options):run { lasts = options.lasts or "1 ms",
    record = { "current", "control", "bridge" } }
end

-- A PI law written in Lua.
coil.own_pi = [[
  local kp, kit, lo, hi = 1.5, 0.25, -6, 6
  return lw.law.own {
    state = { s = 0.5 },
    step = function(wanted, measured, s)
      local e = wanted - measured
      local u = kp * e + s
      if u < lo then u = lo elseif u > hi then u = hi end
      return u, s + kit * e
    end }
]]

return coil
