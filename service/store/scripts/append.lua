#!lua
-- Append one call's rows to the logs of a partition, leaving out rows seen before, and read what
-- its worker has not folded yet.
--
-- Invariant: a row's identity and its record are written together or not at all, and a call that
-- is sent again gets the reply of its first run. All reads that decide come before the first
-- write, since a script is not rolled back.
--
-- What a worker keeps of a stream is trusted while the partition remembers that worker's previous
-- call: a store that lost its last writes forgets it, even where row numbers match again. A call
-- that is not trusted is remembered under another name, so that the calls sent along with it are
-- not trusted either.
--
-- KEYS[i]   log of stream i, i = 1..n ("{tag}log/<path>"); all other keys lie under the same tag
-- ARGV[1]   tag
-- ARGV[2]   this call
-- ARGV[3]   calls judged since, 16 bytes each, to be forgotten
-- ARGV[4]   per stream (32 bytes): rows, bytes of ids (u32 each), incarnation if it is new,
--           incarnation that the worker keeps or zeros, records that it has folded (i64)
-- ARGV[5]   records, 32 bytes a row, streams in the order of KEYS
-- ARGV[6]   idents in decimal, 19 characters a row, or zeros
-- ARGV[7]   ids, each after its length in one byte
-- ARGV[8]   sources: "" or, per row, index (u16, 0 for none) and offset (double)
-- ARGV[9]   names of the sources (msgpack list)
-- ARGV[10]  horizon of ids in seconds
-- ARGV[11]  worker
-- ARGV[12]  name under which the worker's previous call is remembered, "" if it trusts nothing
--
-- Reply     {mask, heads, tails, blobs, trust}
--   mask    a byte a row: "1" for taken, "0" for seen before
--   heads   40 bytes a stream: row number of its first taken row or -1, rows before this call,
--           rows in its snapshot (i64 each), incarnation, generation, status (u32 each)
--   status  0 cold, 1 new (nothing to read), 2 kept (its tail holds what was not folded)
--   tails   records that were in the logs before this call and not folded, of the kept streams
--   blobs   snapshot and log of each cold stream, right after this call
--   trust   1 or 0; -1 for a call sent again: others may have written since, so all is cold
local tag, call = ARGV[1], ARGV[2]
local calls, last = tag .. 'calls', tag .. 'last/' .. ARGV[11]
local n = #KEYS
local prefix = #tag + 5
local COLD, NEW, KEPT = 0, 1, 2

local function read(keys)
  local blobs = {}
  for k = 1, #keys, 2000 do
    local names = {}
    for i = k, math.min(k + 1999, #keys) do
      names[#names + 1] = tag .. 'snap/' .. string.sub(keys[i], prefix)
      names[#names + 1] = keys[i]
    end
    for _, blob in ipairs(redis.call('MGET', unpack(names))) do blobs[#blobs + 1] = blob end
  end
  return blobs
end

local function head(first, rows, header, status)
  return struct.pack('<i8i8', first, rows) .. string.sub(header, 25, 32)
    .. string.sub(header, 9, 16) .. string.sub(header, 5, 8) .. struct.pack('<I4', status)
end

local before = redis.call('HGET', calls, call)
if before then
  local mask, first = unpack(cmsgpack.unpack(before))
  local heads, blobs = {}, read(KEYS)
  for i = 1, n do
    heads[i] = head(first[i], 0, blobs[2 * i] or string.rep('\0', 32), COLD)
  end
  return {mask, table.concat(heads), '', blobs, -1}
end
local trusted = ARGV[12] ~= '' and redis.call('GET', last) == ARGV[12]

local NONE = '0000000000000000000'
local counts, records, decimals, ids = ARGV[4], ARGV[5], ARGV[6], ARGV[7]
local places, sources = ARGV[8], cmsgpack.unpack(ARGV[9])
local horizon = tonumber(ARGV[10])
local time = redis.call('TIME')

-- Return a function that tells whether a log holds an ident, of `asked` times it is asked.
local function in_log(log, asked)
  if asked > 16 then  -- one pass over the log, or many rows against a long log take seconds
    local held = {}
    for at = 41, #log, 32 do held[string.sub(log, at, at + 7)] = true end
    return function(bytes) return held[bytes] end
  end
  return function(bytes)
    local at = string.find(log, bytes, 33, true)
    while at do
      if (at - 33) % 32 == 8 then return true end
      at = string.find(log, bytes, at + 1, true)
    end
    return false
  end
end

local mask, first, plans = {}, {}, {}
local heads, tails, cold = {}, {}, {}
local row, ids_at = 0, 1
for i = 1, n do
  local rows, ids_size, proposed, kept, folded =
    struct.unpack('<I4I4c8c8i8', counts, 32 * i - 31)
  local key = KEYS[i]
  local path = string.sub(key, prefix)
  local header = redis.call('GETRANGE', key, 0, 31)
  local plan = {new = header == '', path = path, taken = 0, marks = nil, adds = nil}
  local generation, base, length, status = 0, 0, 0, COLD
  if plan.new then
    status = NEW
    header = struct.pack('<I4I4', 1, 0) .. proposed .. string.rep('\0', 16)
    plan.header = header
  else
    generation = struct.unpack('<I4', string.sub(header, 5, 8))
    base = struct.unpack('<I8', string.sub(header, 17, 24))
    length = (redis.call('STRLEN', key) - 32) / 32
    if trusted and length % 1 == 0 and kept == string.sub(header, 9, 16)
      and base <= folded and folded <= base + length then
      status = KEPT
      if folded < base + length then
        tails[#tails + 1] = redis.call('GETRANGE', key, 32 * (folded - base) + 32, -1)
      end
    else
      cold[#cold + 1] = key
    end
  end
  if generation == 0 and not plan.new then
    plan.log = redis.call('GET', key)
    plan.holds = in_log(plan.log, rows)
  end
  plan.generation = generation
  local seen = tag .. 'seen/' .. path
  local in_call, epochs = {}, nil
  for j = row + 1, row + rows do
    local source, offset = 0, 0
    if places ~= '' then
      source, offset = struct.unpack('<I2d', string.sub(places, 10 * j - 9, 10 * j))
    end
    local known = false
    if source > 0 then
      plan.marks = plan.marks or {}
      local mark = plan.marks[source]
      if mark == nil then
        mark = tonumber(redis.call('HGET', tag .. 'marks/' .. path, sources[source]) or -1)
      end
      known = offset <= mark
      plan.marks[source] = known and mark or offset
    else
      local ident = string.sub(decimals, 19 * j - 18, 19 * j)
      if ident ~= NONE then
        known = in_call[ident]
        if not known and plan.log then
          known = plan.holds(string.sub(records, 32 * j - 23, 32 * j - 16))
        elseif not known and generation > 0 then
          epochs = epochs or epochs_of(seen)
          known = is_seen(seen, epochs, ident)
        end
        in_call[ident] = true
        if not known and generation > 0 then
          plan.adds = plan.adds or {}
          plan.adds[#plan.adds + 1] = ident
        end
      end
    end
    mask[j] = known and '0' or '1'
    if not known then plan.taken = plan.taken + 1 end
  end
  first[i] = plan.taken > 0 and base + length or -1
  heads[i] = head(first[i], base + length, header, status)
  if plan.taken == rows then
    plan.chunk = string.sub(records, 32 * row + 1, 32 * (row + rows))
    plan.ids = string.sub(ids, ids_at, ids_at + ids_size - 1)
  elseif plan.taken > 0 then
    local kept, kept_ids, at = {}, {}, ids_at
    for j = row + 1, row + rows do
      local size = string.byte(ids, at) + 1
      if mask[j] == '1' then
        kept[#kept + 1] = string.sub(records, 32 * j - 31, 32 * j)
        kept_ids[#kept_ids + 1] = string.sub(ids, at, at + size - 1)
      end
      at = at + size
    end
    plan.chunk, plan.ids = table.concat(kept), table.concat(kept_ids)
  end
  plans[i] = plan
  row = row + rows
  ids_at = ids_at + ids_size
end

local dirty, paths = {}, {}
for i = 1, n do
  local plan = plans[i]
  paths[i] = plan.path
  if plan.taken > 0 then
    local key = KEYS[i]
    if plan.new then
      redis.call('SET', key, plan.header .. plan.chunk)
      local tenant, merchant, rest = string.match(plan.path, '^([^/]*)/([^/]*)/(.*)$')
      redis.call('SADD', tag .. 'of/' .. tenant .. '/' .. merchant, rest)
    elseif plan.log then
      redis.call('SET', key, plan.log .. plan.chunk)  -- APPEND would over-allocate
    else
      redis.call('APPEND', key, plan.chunk)
    end
    redis.call('APPEND', tag .. 'ids/' .. plan.path, plan.ids)
    for source, mark in pairs(plan.marks or {}) do
      redis.call('HSET', tag .. 'marks/' .. plan.path, sources[source],
        string.format('%.0f', mark))
    end
    if plan.adds then remember(tag .. 'seen/' .. plan.path, plan.adds, time[1], horizon) end
    dirty[#dirty + 1] = plan.path
    dirty[#dirty + 1] = call
  end
end
local joined = table.concat(mask)
redis.call('HSET', calls, call, cmsgpack.pack({joined, first, paths}))
redis.call('ZADD', tag .. 'pending', time[1] * 1000 + math.floor(time[2] / 1000), call)
for k = 1, #dirty, 4000 do
  redis.call('HSET', tag .. 'dirty', unpack(dirty, k, math.min(k + 3999, #dirty)))
end
for k = 1, #ARGV[3], 16 do
  local judged = string.sub(ARGV[3], k, k + 15)
  redis.call('HDEL', calls, judged)
  redis.call('ZREM', tag .. 'pending', judged)
end
redis.call('SET', last, trusted and call or '-' .. call, 'EX', 3600)
return {joined, table.concat(heads), table.concat(tails), read(cold), trusted and 1 or 0}
