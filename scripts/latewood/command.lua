-- The commands of the program: run, describe, new. The program calls command.main with its
-- arguments and with the few things a script may not do itself (host).
--
-- host.load(path): the value a study file returns, or nil, message, exit code
-- host.write(folder, file, text): true, or nil, message, exit code; by temporary name and rename
-- host.make_folder(path): true, or nil and a message
-- host.exists(path)
-- host.out(text), host.err(text)
-- host.again(): a new allowance of instructions for the study's own code
-- host.colour, host.progress: whether standard output, standard error is a terminal for that

local lw = require "latewood"
local batch_command = require "latewood.batch_command"
local figure = require "latewood.figure"
local json = require "latewood.json"
local own_metric = require "latewood.own_metric"
local report = require "latewood.report"
local starter = require "latewood.starter"
local study = require "latewood.study"
local timed = require "latewood.timed"
local trial = require "latewood.trial"
local words = require "latewood.words"

local command = {}

local OK, NOT_MET, UNDECIDED = 0, 1, 2
local USAGE, DATA, CANNOT_CREATE = 64, 65, 73

local main_help = [[
usage: latewood COMMAND ...

What control timing does to a loop: simulate it exactly, judge it against stated limits.

commands
  run STUDY.lua [name=value ...]        run a study: table, verdict, figures
  describe STUDY.lua [name=value ...]   a study's rig in words; runs nothing
  new DIR                               write a study to start from

latewood COMMAND --help tells more. latewood --version prints the version.

exit codes
  0 requirements met (or none stated)   1 not met   2 undecided
  64 wrong usage   65 the study is wrong   66 no such file   70 a fault of the program
  73 a file cannot be created   74 input or output failed   128 + n stopped by signal n

Results go to standard output, everything else to standard error. NO_COLOR and TERM=dumb are heeded.
]]

local helps = {
  run = [[
usage: latewood run STUDY.lua [options] [name=value ...]

Runs the study and prints what it says. Figures (SVG), traces (CSV) and the same result as JSON go
to a folder beside the study, named after it: STUDY-results.

  name=value     set a parameter that the study lists under `given`
  --out DIR      put the results there instead
  --runs N       number of runs, instead of the study's
  --seed N       seed of the draws, instead of the study's
  --run N        run number N alone, as it was in a batch, with its figures
  --jobs N       processes that compute a batch; as many as there are cores unless stated
  --ledger FILE  keep the batch's rows in FILE (SQLite); the same command goes on where it stopped
  --shard K/N    compute only the runs whose number gives K when divided by N, into a ledger
  --json         print the result as JSON (schema latewood-run-1) and nothing else
  --quiet        print the verdict only

A study's own code may use 2e9 Lua instructions at one stretch (its file, building a rig, one run)
and 1 GiB of memory. It sees no files but those of its own folder.
]],
  describe = [[
usage: latewood describe STUDY.lua [options] [name=value ...]

Builds and checks the study's rig, says in words what it is made of, which defaults were taken,
what was rounded, and who sees what at one instant. Runs nothing.

  name=value     set a parameter that the study lists under `given`
  --json         print the lines as JSON (schema latewood-describe-1)
]],
  new = [[
usage: latewood new DIR [--json]

Writes study.lua, README.md and .luarc.json into DIR, which is made if it is not there. Files that
exist are left alone, and nothing is written then.

  --json         print what was written as JSON (schema latewood-new-1)
]],
}

local takes = { run = { ["--out"] = true, ["--runs"] = true, ["--seed"] = true, ["--jobs"] = true,
    ["--ledger"] = true, ["--shard"] = true, ["--run"] = true },
  describe = {}, new = {} }
local flags = { run = { ["--json"] = true, ["--quiet"] = true }, describe = { ["--json"] = true },
  new = { ["--json"] = true } }

local function options_of(name)
  local list = { "--help" }
  for k in pairs(takes[name]) do list[#list + 1] = k end
  for k in pairs(flags[name]) do list[#list + 1] = k end
  table.sort(list)
  return list
end

-- One option at place i of the arguments: the place of the next argument, or nil and a message.
local function take_option(name, arguments, i, options)
  local a = arguments[i]
  local option, value = a:match("^(%-%-[^=]+)=(.*)$")
  option = option or a
  if options[option] ~= nil then return nil, ("option %s stands there twice"):format(option) end
  if flags[name][option] and a == option then
    options[option] = true
    return i + 1
  end
  if takes[name][option] then
    if not value then
      i = i + 1
      value = arguments[i]
    end
    if not value or value == "" then return nil, ("option %s needs a value"):format(option) end
    options[option] = value
    return i + 1
  end
  local near = lw.nearest(option, options_of(name))
  return nil, ("%s has no option %s%s"):format(name, option, near and "; nearest " .. near or "")
end

-- A name=value pair or the file; nil and a message where it is neither.
local function take_other(name, a, p)
  local key, value = a:match("^([^=/]+)=(.*)$")
  if key and name ~= "new" and not a:find("%.lua$") then
    for _, pair in ipairs(p.pairs) do
      if pair.name == key then return nil, ("parameter \"%s\" is set twice"):format(key) end
    end
    p.pairs[#p.pairs + 1] = { name = key, text = value }
  elseif p.file == nil and a ~= "" then
    p.file = a
  else
    return nil, ("\"%s\" is one argument too many%s"):format(a,
      name ~= "new" and "; parameters are set by name=value" or "")
  end
  return true
end

-- Split arguments into a file, options and name=value pairs; nil and a message if they are wrong.
local function parse(name, arguments)
  local p, i = { pairs = {}, options = {} }, 1
  while i <= #arguments do
    local message
    if arguments[i]:find("^%-.") then
      i, message = take_option(name, arguments, i, p.options)
      if not i then return nil, message end
    else
      local done
      done, message = take_other(name, arguments[i], p)
      if not done then return nil, message end
      i = i + 1
    end
  end
  if not p.file then return nil, (name == "new" and "DIR" or "STUDY.lua") .. " is missing" end
  return p
end

local function whole(options, name, least, most)
  local text = options[name]
  if text == nil then return nil end
  local n = text:match("^%d+$") and math.tointeger(tonumber(text))
  if not n or n < least or n > most then
    return nil, ("option %s is \"%s\"; a whole number from %d to %d is wanted"):format(name, text,
      least, most)
  end
  return n
end

-- Tell of a failure in the way asked for; returns the exit code.
local function complain(host, options, code, message)
  if options["--json"] then
    host.out(json.encode(report.error_data(code, message)))
  end
  host.err("latewood: " .. words.plain(message) .. "\n")
  return code
end

-- The study in a file, or nil, message, exit code.
local function load_study(host, file)
  local value, message, code = host.load(file)
  if code then return nil, message, code end
  if not study.is(value) then
    return nil, ("%s: the file returns %s; a study is wanted (return lw.study { ... })")
      :format(file, value == nil and "nothing" or "a " .. type(value)), DATA
  end
  return value
end

-- Run a function of the study; a raised message is the study's fault.
local function guarded(f, ...)
  local results = table.pack(pcall(f, ...))
  if results[1] then return table.unpack(results, 2, results.n) end
  local message = results[2]
  if message == "not enough memory" then return nil, message .. "; a study may use 1024 MiB" end
  if type(message) == "string" or type(message) == "number" then return nil, tostring(message) end
  return nil, ("the study raised a value of type %s instead of a message"):format(type(message))
end

local function base_name(path)
  return (path:gsub("^.*/", ""):gsub("%.lua$", ""))
end

-- What goes to the folder: list of { file, function that gives its text }. Names first, so that
-- the JSON, which comes last, can list them; texts when they are written, one at a time. data(files)
-- gives the JSON where it is not that of a single trial.
local function contents(s, result, name, data)
  local pending, taken, files = {}, { result = true }, {}
  local function add(file, text) pending[#pending + 1] = { file, text } end
  for i, f in ipairs(figure.all(s, result)) do
    add(f.file, function() return f.text end)
    for _, variant in ipairs(result.variants) do
      local signals = {}
      for signal in pairs(variant.traces[i]) do signals[#signals + 1] = signal end
      table.sort(signals)
      for _, signal in ipairs(signals) do
        local file = figure.trace_name(f.name, #result.variants > 1 and variant.name or nil,
          signal, taken)
        add(file .. ".csv", variant.traces[i][signal].csv)
      end
    end
  end
  for i, entry in ipairs(pending) do files[i] = entry[1] end
  files[#files + 1] = "result.json"
  add("result.json", function()
    return data and data(files) or json.encode(report.data(s, result, name, files))
  end)
  return pending, files
end

-- Write everything; the names of the files, or nil, message, exit code.
local function write_results(host, s, result, folder, name)
  local pending, files = contents(s, result, name)
  for _, entry in ipairs(pending) do
    local done, why, code = host.write(folder, entry[1], entry[2]())
    if not done then return nil, why, code end
  end
  return files
end

-- A line on standard error that tells how far the runs are, written over about 100 times.
local function progress_of(host)
  local function show(variant, run_, runs)
    if runs > 1 and run_ % math.max(1, runs // 100) == 0 then
      host.err(("\r\27[K%s: run %d of %d"):format(words.cut(words.plain(variant), 40), run_, runs))
    end
  end
  local function clear() host.err("\r\27[K") end
  return show, clear
end

local function execute(host, s, p, settings)
  local options = { runs = settings.runs, seed = settings.seed, first = settings.first,
    again = host.again }
  local clear = function() end
  if host.progress and not p.options["--quiet"] and (settings.runs or s.runs) > 1 then
    options.progress, clear = progress_of(host)
  end
  local result, why = guarded(study.execute, s, p.pairs, options)
  clear()
  return result, why
end

-- What batch commands use of this file.
local tools

local function run(host, p)
  local options = p.options
  local runs, bad_runs = whole(options, "--runs", 1, 1000000)
  local seed, bad_seed = whole(options, "--seed", 0, math.maxinteger)
  local only, bad_only = whole(options, "--run", 0, math.maxinteger)
  if bad_runs or bad_seed or bad_only then
    return complain(host, options, USAGE, bad_runs or bad_seed or bad_only)
  end
  if only and runs then
    return complain(host, options, USAGE, "--run is one run and --runs many; one is wanted")
  end
  local s, message, code = load_study(host, p.file)
  if not s then return complain(host, options, code, message) end
  if not only and batch_command.wanted(s, options, runs or s.runs) then
    return batch_command.run(host, s, p, { runs = runs, seed = seed }, tools)
  end
  local result, why = execute(host, s, p, { runs = only and 1 or runs, seed = seed, first = only })
  if not result then return complain(host, options, DATA, why) end
  local folder = options["--out"] or p.file:gsub("%.lua$", "") .. "-results"
  local made, fault = host.make_folder(folder)
  if not made then return complain(host, options, CANNOT_CREATE, fault) end
  local in_words = not options["--json"] and not options["--quiet"]
  if in_words then -- before the files, so that nobody waits for them
    host.out(table.concat(report.lines(s, result, host.colour), "\n") .. "\n")
  end
  local files, trouble, kind = write_results(host, s, result, folder, base_name(p.file))
  if not files then return complain(host, options, kind, trouble) end
  if options["--json"] then
    host.out(json.encode(report.data(s, result, base_name(p.file), files)))
  elseif options["--quiet"] then
    host.out((result.verdict or "no requirement") .. ", of the model\n")
  else
    host.out(table.concat(report.closing(files, words.plain(folder),
      "latewood describe " .. words.shell(p.file)), "\n") .. "\n")
  end
  return ({ met = OK, ["not met"] = NOT_MET, undecided = UNDECIDED })[result.verdict or "met"]
end

-- Differences between two lists of lines, as those of the second.
local function changed(first, second)
  local known, out = {}, {}
  for _, line in ipairs(first) do known[line] = true end
  for _, line in ipairs(second) do
    if not known[line] then out[#out + 1] = line end
  end
  return out
end

local function describe_variant(s, pairs_, variant)
  local parameters, message = trial.parameters(s, pairs_, variant.own)
  if not parameters then return nil, message end
  local rig = trial.rig(s, parameters)
  local metrics = own_metric.engine(s)
  trial.checked(s, rig.freeze, rig, { lasts = s.lasts, metrics = metrics,
    record = own_metric.records(s, trial.records(s)) })
  local lines = rig:describe { lasts = s.lasts, metrics = metrics }
  for _, line in ipairs(timed.describe(rig, { lasts = s.lasts })) do lines[#lines + 1] = line end
  for _, line in ipairs(own_metric.describe(s)) do lines[#lines + 1] = line end
  return lines
end

local function describe(host, p)
  local s, message, code = load_study(host, p.file)
  if not s then return complain(host, p.options, code, message) end
  local lines, data = {}, {}
  for i, variant in ipairs(trial.variants(s)) do
    local own, why = guarded(describe_variant, s, p.pairs, variant)
    if not own then return complain(host, p.options, DATA, why) end
    data[i] = json.ordered({ "variant", "lines" }, { variant = variant.name,
      lines = json.list(own) })
    if i > 1 then
      lines[#lines + 1] = ""
      lines[#lines + 1] = ("what is different in \"%s\":"):format(variant.name)
      own = changed(data[1].lines, own)
      if #own == 0 then own = { "  nothing in the rig" } end
    end
    table.move(own, 1, #own, #lines + 1, lines)
  end
  if p.options["--json"] then
    host.out(json.encode(json.ordered({ "schema", "variants" },
      { schema = "latewood-describe-1", variants = json.list(data) })))
  else
    host.out(table.concat(lines, "\n") .. "\n")
  end
  return OK
end

local function new(host, p)
  local made, message = host.make_folder(p.file)
  if not made then return complain(host, p.options, CANNOT_CREATE, message) end
  for _, f in ipairs(starter) do
    if host.exists(p.file .. "/" .. f.file) then
      return complain(host, p.options, CANNOT_CREATE,
        ("%s/%s exists; nothing was written"):format(p.file, f.file))
    end
  end
  for _, f in ipairs(starter) do
    local done, why, code = host.write(p.file, f.file, f.text)
    if not done then return complain(host, p.options, code, why) end
  end
  if p.options["--json"] then
    local names = {}
    for i, f in ipairs(starter) do names[i] = f.file end
    host.out(json.encode(json.ordered({ "schema", "folder", "files" },
      { schema = "latewood-new-1", folder = p.file, files = json.list(names) })))
    return OK
  end
  host.out(("wrote study.lua, README.md and .luarc.json to %s\nnext: latewood run %s\n")
    :format(words.plain(p.file), words.shell(p.file .. "/study.lua")))
  return OK
end

tools = { complain = complain, guarded = guarded, whole = whole, base_name = base_name,
  contents = contents }

local commands = { run = run, describe = describe, new = new }

-- Do what the arguments say; returns the exit code.
function command.main(arguments, host)
  local name = arguments[1]
  if name == "--help" or name == "-h" or name == "help" then
    host.out(main_help)
    return OK
  end
  if name == "--version" then
    host.out(lw._VERSION .. "\n")
    return OK
  end
  if not name then
    host.err(main_help)
    return USAGE
  end
  local rest, asked = table.move(arguments, 2, #arguments, 1, {}), {}
  for _, a in ipairs(rest) do asked[a] = true end
  if not commands[name] then
    local near = lw.nearest(name, { "run", "describe", "new", "--help", "--version" })
    return complain(host, asked, USAGE, ("there is no command \"%s\"%s; latewood --help lists them")
      :format(name, near and ("; nearest \"%s\""):format(near) or ""))
  end
  if asked["--help"] or asked["-h"] then
    host.out(helps[name])
    return OK
  end
  local p, message = parse(name, rest)
  if not p then
    return complain(host, asked, USAGE, message .. ("; latewood %s --help tells more"):format(name))
  end
  return commands[name](host, p)
end

return command
