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
-- not trusted either. A lost compaction, which may have told of a crossing, shows in the log's
-- generation.
--
-- KEYS[i]   log of stream i, i = 1..n ("{tag}log/<path>"); all other keys lie under the same tag
-- ARGV[1]   tag
-- ARGV[2]   this call
-- ARGV[3]   calls judged since, 16 bytes each, to be forgotten
-- ARGV[4]   by stream (msgpack list of four): rows, bytes of ids, records that the worker folded, and
--           the log's generation that it knows of
-- ARGV[5]   by stream: its incarnation if it is new, the one that the worker keeps or zeros (u64)
-- ARGV[6]   records, 32 bytes a row, streams in the order of KEYS; no ident twice in a stream
-- ARGV[7]   idents in decimal, 19 characters a row
-- ARGV[8]   ids, each after its length in one byte
-- ARGV[9]   sources: "" or, per row, index (u16, 0 for none) and offset (double)
-- ARGV[10]  names of the sources (msgpack list)
-- ARGV[11]  horizon of ids in seconds
-- ARGV[12]  worker
-- ARGV[13]  name of the store that the worker takes this for
-- ARGV[14]  name under which the worker's previous call is remembered, "" if it trusts nothing
--
-- Reply     {mask, heads, tails, blobs, trust}
--   mask    a byte a row: "1" for taken, "0" for seen before
--   heads   48 bytes a stream: header of its log, row number that followed its last one (i64; both
--           before this call) and status (u8)
--   status  0 cold, 1 new (nothing to read), 2 kept (its tail holds what was not folded)
--   tails   records that were in the logs before this call and not folded, of the kept streams
--   blobs   snapshot and log of each cold stream, right after this call
--   trust   1 or 0; -1 for a call sent again: others may have written since, so all is cold
local LONG = 32  -- rows from which on a stream's idents are in sets, not only in its log
local COLD, NEW, KEPT = '\0\0\0\0\0\0\0\0', '\1\0\0\0\0\0\0\0', '\2\0\0\0\0\0\0\0'
local NONE, NO_IDENT = string.rep('\0', 8), string.rep('0', 19)

local tag, token = ARGV[1], ARGV[2]
local rows_of, id_bytes, folded_of, generation_of = unpack(cmsgpack.unpack(ARGV[4]))
local incarnations, records, decimals, ids, places = ARGV[5], ARGV[6], ARGV[7], ARGV[8], ARGV[9]
local calls, pending, last = tag .. 'calls', tag .. 'pending', tag .. 'last/' .. ARGV[12]
local find, n, prefix = string.find, #KEYS, #tag + 5

local function get(keys)
  local values = {}
  for k = 1, #keys, 4000 do
    local some = call('MGET', unpack(keys, k, math.min(k + 3999, #keys)))
    for m = 1, #some do values[k + m - 1] = some[m] end
  end
  return values
end

local function blobs_of(logs)
  local keys = {}
  for i = 1, #logs do
    keys[2 * i - 1], keys[2 * i] = tag .. 'snap/' .. sub(logs[i], prefix), logs[i]
  end
  return get(keys)
end

local before = call('HGET', calls, token)
if before then
  local mask, row = unpack(cmsgpack.unpack(before))
  local blobs, heads = blobs_of(KEYS), {}
  for i = 1, n do
    local log = blobs[2 * i] or string.rep('\0', 32)
    heads[i] = sub(log, 1, 32) .. struct.pack('<i8', row[i]) .. COLD
  end
  return {mask, table.concat(heads), '', blobs, -1}
end

-- Read as a whole what a worker's own state says to be short, and the index of the others.
local paths, keys = {}, {last, tag .. 'mark'}
for i = 1, n do
  local path = sub(KEYS[i], prefix)
  local short = folded_of[i] > 0 and folded_of[i] < LONG
  paths[i], keys[i + 2] = path, short and KEYS[i] or tag .. 'seen/' .. path
end
local values = get(keys)
if (values[2] or '') ~= ARGV[13] then
  return redis.error_reply('STRANGER the partition belongs to another store')
end
local trusted = ARGV[14] ~= '' and values[1] == ARGV[14]
local time = call('TIME')
local now = time[1]

-- Return the number of a stream's next row, its header, its log if it is short, else its index, and
-- whether its log is torn.
local function look_at(i)
  local key, log, index, header, size = KEYS[i], nil, nil, nil, 0
  if keys[i + 2] == key then
    log = values[i + 2] or ''
    header, size = sub(log, 1, 32), #log
  else
    index = values[i + 2] or ''
    header = call('GETRANGE', key, 0, 31)
    if header == '' then return 0, header, '' end
    size = call('STRLEN', key)
  end
  if size == 0 then return 0, header, '' end
  local torn = size % 32 > 0
  local row = struct.unpack('<i8', header, 17) + math.floor(size / 32) - 1
  if row < LONG then return row, header, log or call('GET', key), nil, torn end
  return row, header, nil, index or call('GET', tag .. 'seen/' .. paths[i]) or '', torn
end

local function in_log(log, ident)
  local at = find(log, ident, 33, true)
  while at do
    if at % 32 == 9 then return true end
    at = find(log, ident, at + 1, true)
  end
  return false
end

-- Return the idents of rows that are not known, in decimal.
local function idents_of(from, to, known)
  local idents = {}
  for j = from, to do
    local ident = sub(decimals, 19 * j - 18, 19 * j)
    if ident ~= NO_IDENT and not (known and known[j]) then idents[#idents + 1] = ident end
  end
  return idents
end

-- Return the idents in a log, in decimal.
local function idents_in(log)
  local idents = {}
  for at = 41, #log, 32 do
    if sub(log, at, at + 7) ~= NONE then
      local a, b, c = struct.unpack('<I3I3I2', log, at)  -- a + 2^24 b + 2^48 c, below 2^53 each
      local low = a + 6777216 * b + 6710656 * c
      local high = math.floor(low / 1e7) + b + 28147497 * c
      idents[#idents + 1] = string.format('%.0f%07.0f', high, low % 1e7)
    end
  end
  return idents
end

local sources, marks = places ~= '' and cmsgpack.unpack(ARGV[10]), {}

-- Return the rows whose offset is at or below the mark of their source, and move the marks.
local function below_marks(path, from, to)
  local known, held = {}, {}
  for j = from, to do
    local source, offset = struct.unpack('<I2d', places, 10 * j - 9)
    if source > 0 then
      local mark = held[source]
        or tonumber(call('HGET', tag .. 'marks/' .. path, sources[source]) or -1)
      if offset <= mark then known[j] = true end
      held[source] = math.max(mark, offset)
    end
  end
  marks[path] = held
  return next(known) and known
end

-- Return the rows seen before, as keys of a table; nil for none.
local function seen_before(path, log, index, from, to)
  local known = sources and below_marks(path, from, to) or nil
  if index then
    local found = look_up(tag .. 'seen/' .. path, index, idents_of(from, to), now)
    if found then
      known = known or {}
      for j = from, to do
        if found[sub(decimals, 19 * j - 18, 19 * j)] then known[j] = true end
      end
    end
  elseif log ~= '' then
    for j = from, to do
      local ident = sub(records, 32 * j - 23, 32 * j - 16)
      if ident ~= NONE and in_log(log, ident) then
        known = known or {}
        known[j] = true
      end
    end
  end
  return known
end

local mask, heads, tails, cold = {}, {}, {}, {}
local rows_before, logs, indices, knowns, chunks, id_chunks = {}, {}, {}, {}, {}, {}
local from, id = 1, 1
for i = 1, n do
  local rows, folded, status = rows_of[i], folded_of[i], NEW
  local to, id_end = from + rows - 1, id + id_bytes[i] - 1
  local row, header, log, index, torn = look_at(i)
  if header == '' then
    local proposed = sub(incarnations, 16 * i - 15, 16 * i - 8)
    header = '\1\0\0\0\0\0\0\0' .. proposed .. '\0\0\0\0\0\0\0\0\0\0\0\0\0\0\0\0'
  else
    local base = struct.unpack('<i8', header, 17)
    if trusted and not torn and base <= folded and folded <= row
      and struct.unpack('<I4', header, 5) >= generation_of[i]
      and sub(header, 9, 16) == sub(incarnations, 16 * i - 7, 16 * i) then
      status = KEPT
      if folded < row then
        tails[#tails + 1] = call('GETRANGE', KEYS[i], 32 * (folded - base + 1), -1)
      end
    else
      status = COLD
      cold[#cold + 1] = KEYS[i]
    end
  end
  rows_before[i], logs[i], indices[i] = row, log, index
  heads[i] = header .. struct.pack('<i8', row) .. status

  local known = seen_before(paths[i], log, index, from, to)
  if not known then
    mask[i] = string.rep('1', rows)
    chunks[i], id_chunks[i] = sub(records, 32 * from - 31, 32 * to), sub(ids, id, id_end)
  else
    local bits, taken, taken_ids = {}, {}, {}
    for j = from, to do
      local id_next = id + string.byte(ids, id) + 1
      bits[#bits + 1] = known[j] and '0' or '1'
      if not known[j] then
        taken[#taken + 1] = sub(records, 32 * j - 31, 32 * j)
        taken_ids[#taken_ids + 1] = sub(ids, id, id_next - 1)
      end
      id = id_next
    end
    mask[i], knowns[i] = table.concat(bits), known
    chunks[i], id_chunks[i] = table.concat(taken), table.concat(taken_ids)
  end
  from, id = to + 1, id_end + 1
end

local horizon = tonumber(ARGV[11])
local goes = string.format('%010d', (math.floor(now / horizon) + 2) * horizon + DAY)
local dirty = {}
from = 1
for i = 1, n do
  local path, row, log, chunk = paths[i], rows_before[i], logs[i], chunks[i]
  if chunk ~= '' then
    local long = row + #chunk / 32 >= LONG
    if long then
      local idents = idents_of(from, from + rows_of[i] - 1, knowns[i])
      if log then
        local earlier = idents_in(log)
        for k = 1, #idents do earlier[#earlier + 1] = idents[k] end
        idents, row = earlier, 0
      end
      remember(tag .. 'seen/' .. path, indices[i] or '', idents, row, goes, now)
    end
    if log == '' then
      call('SET', KEYS[i], sub(heads[i], 1, 32) .. chunk)
      local tenant, merchant, rest = string.match(path, '^([^/]*)/([^/]*)/(.*)$')
      call('SADD', tag .. 'of/' .. tenant .. '/' .. merchant, rest)
    elseif long then
      call('APPEND', KEYS[i], chunk)
    else
      call('SET', KEYS[i], log .. chunk)  -- APPEND would over-allocate
    end
    call('APPEND', tag .. 'ids/' .. path, id_chunks[i])
    for source, mark in pairs(marks[path] or {}) do
      call('HSET', tag .. 'marks/' .. path, sources[source], string.format('%.0f', mark))
    end
    dirty[#dirty + 1] = path
    dirty[#dirty + 1] = token
  end
  from = from + rows_of[i]
end
local joined = table.concat(mask)
call('HSET', calls, token, cmsgpack.pack({joined, rows_before, paths}))
call('ZADD', pending, now * 1000 + math.floor(time[2] / 1000), token)
for k = 1, #dirty, 4000 do
  call('HSET', tag .. 'dirty', unpack(dirty, k, math.min(k + 3999, #dirty)))
end
local judged = {}
for k = 1, #ARGV[3], 16 do judged[#judged + 1] = sub(ARGV[3], k, k + 15) end
for k = 1, #judged, 4000 do
  local to = math.min(k + 3999, #judged)
  call('HDEL', calls, unpack(judged, k, to))
  call('ZREM', pending, unpack(judged, k, to))
end
call('SET', last, trusted and token or '-' .. token, 'EX', 3600)
return {joined, table.concat(heads), table.concat(tails), blobs_of(cold), trusted and 1 or 0}
