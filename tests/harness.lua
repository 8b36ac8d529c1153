-- A small counting harness for the Lua suites: plain assertions, one closing line, and an exit that
-- tells of failures. A test's name states a property.
--
-- The same suite can be run under different ways of collecting garbage: it is a function, called
-- once a way.

local harness = { passed = 0, failed = 0, way = "" }

local function report(ok, name, message)
  if ok then
    harness.passed = harness.passed + 1
    return
  end
  harness.failed = harness.failed + 1
  print(("FAILED %s%s: %s"):format(name, harness.way, message))
end

-- Run `body`; it passes when it raises nothing.
function harness.test(name, body)
  local ok, message = pcall(body)
  report(ok, name, tostring(message))
end

local function complain(level, ...)
  error(string.format(...), level + 1)
end

function harness.equal(got, want, what)
  if got ~= want then
    complain(2, "%s is %s (%s), wanted %s (%s)", what or "value", tostring(got), math.type(got) or
      type(got), tostring(want), math.type(want) or type(want))
  end
end

-- |got - want| <= tolerance * max(|want|, scale), and got is a number.
function harness.near(got, want, tolerance, scale)
  local distance = math.abs(got - want)
  local most = tolerance * math.max(math.abs(want), scale or 0)
  if distance ~= distance or distance > most then
    complain(2, "%.17g is not near %.17g", got, want)
  end
end

-- The lists are equal, element by element.
function harness.same_list(got, want)
  harness.equal(#got, #want, "length")
  for i = 1, #want do
    harness.equal(got[i], want[i], "element " .. i)
  end
end

-- `body` raises a message that holds each of the plain texts given.
function harness.raises(body, ...)
  local ok, message = pcall(body)
  if ok then
    complain(2, "nothing was raised; wanted: %s", table.concat({ ... }, " / "))
  end
  message = tostring(message)
  for _, text in ipairs { ... } do
    if not message:find(text, 1, true) then
      complain(2, "the message is:\n  %s\nit lacks:\n  %s", message, text)
    end
  end
  return message
end

-- Collect all garbage, where the interpreter lets a chunk do that: a study's sandbox does not.
function harness.collect()
  if collectgarbage then
    collectgarbage()
    collectgarbage()
  end
end

-- Call the suite under stepped, generational and eager collection; once in a sandbox.
function harness.run_under_all_collectors(suite)
  if not collectgarbage then
    suite()
    return
  end
  harness.way = " (incremental)"
  collectgarbage("incremental")
  suite()
  harness.way = " (generational)"
  collectgarbage("generational")
  suite()
  harness.way = " (collecting all the time)"
  collectgarbage("incremental", 100, 1000, 1)
  debug.sethook(function() collectgarbage() end, "", 97)
  suite()
  debug.sethook()
  harness.way = ""
end

-- The closing line; raises, and so ends the interpreter badly, where something failed.
function harness.finish()
  print(("%d passed, %d failed"):format(harness.passed, harness.failed))
  local failed = harness.failed
  harness.passed, harness.failed = 0, 0
  if failed > 0 then
    error("tests failed", 0)
  end
end

return harness
