-- Post the bodies of a file one after the other, each once, and print what came of it as JSON.
--
-- Arguments  FILE OFFSET SECONDS AGAIN WANTED
--   FILE     bodies, each after its length in a line of its own
--   OFFSET   where in the file to begin, in bytes; the next run begins at "offset" of the result
--   SECONDS  no body is begun later; 0: only the end of the file ends the run
--   AGAIN    "again" begins anew at the end of the file, for a server that keeps nothing
--   WANTED   what an answer must hold to be counted as one, a plain text
--
-- Every request that was begun is answered before the run ends, so that counts, and what servers
-- spent on them, belong together. Wants one wrk thread.

local ffi = require("ffi")
ffi.cdef [[
  struct timespec { long seconds; long nanoseconds; };
  int clock_gettime(int clock, struct timespec *time);
  int getpid(void);
  int kill(int pid, int signal);
]]
local MONOTONIC, SIGINT = 1, 2

local spec = ffi.new("struct timespec")
local function now()
  ffi.C.clock_gettime(MONOTONIC, spec)
  return tonumber(spec.seconds) + tonumber(spec.nanoseconds) / 1e9
end

local bodies, seconds, again, wanted
local ending = false
tested, sent, answered, refused, accepted, duplicates = false, 0, 0, 0, 0, 0
began, ended, offset, refusal = 0, 0, 0, ""

function init(args)
  wrk.method = "POST"
  bodies = assert(io.open(args[1], "rb"))
  bodies:seek("set", tonumber(args[2]))
  seconds, again, wanted = tonumber(args[3]), args[4] == "again", args[5]
end

local function next_body()
  local length = bodies:read("*l")
  if not length and again then
    bodies:seek("set")
    length = bodies:read("*l")
  end
  return length and bodies:read(tonumber(length))
end

local function over()
  return ending or (seconds > 0 and sent > 0 and now() - began > seconds)
end

local function end_if_all_answered()
  if answered == sent then
    offset = bodies:seek()
    ffi.C.kill(ffi.C.getpid(), SIGINT) -- wakes wrk, which would sleep until its duration is over
  end
end

function request()
  if not tested then -- wrk tries a request of its first thread and does not send it
    tested = true
    return wrk.format()
  end
  local body = not over() and next_body()
  if not body then
    ending = true
    end_if_all_answered()
    return "" -- which parks the connection
  end
  if sent == 0 then began = now() end
  sent = sent + 1
  return wrk.format(nil, nil, nil, body)
end

function response(status, _, body)
  answered, ended = answered + 1, now()
  if status == 200 and body:find(wanted, 1, true) then
    accepted = accepted + tonumber(body:match('"accepted":%s*(%d+)'))
    duplicates = duplicates + tonumber(body:match('"duplicates":%s*(%d+)'))
  else
    refused = refused + 1
    refusal = status .. " " .. body:sub(1, 300)
  end
  if ending then end_if_all_answered() end
end

local thread
function setup(only)
  thread = only
end

function done(summary, latency, _)
  local errors = summary.errors
  io.write(string.format(
    '\n{"sent": %d, "answered": %d, "refused": %d, "accepted": %d, "duplicates": %d, ' ..
    '"offset": %.0f, "seconds": %.6f, "p50": %.3f, "p99": %.3f, "socket_errors": %d, "refusal": "%s"}\n',
    thread:get("sent"), thread:get("answered"), thread:get("refused"), thread:get("accepted"),
    thread:get("duplicates"), thread:get("offset"), thread:get("ended") - thread:get("began"),
    latency:percentile(50) / 1000, latency:percentile(99) / 1000,
    errors.connect + errors.read + errors.write + errors.timeout,
    thread:get("refusal"):gsub('[%c"\\]', " ")))
end
