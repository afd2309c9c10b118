#!lua
-- Append one call's rows to the logs of a partition, leaving out rows seen before, and read what
-- its worker has not folded yet.
--
-- Invariant: a row's identity and its record are written together or not at all, and a call that
-- is sent again gets the reply of its first run. All reads that decide come before the first
-- write, since a script is not rolled back; the number of a long stream's next row decides nothing
-- and is known from the length of its log after the write.
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
-- ARGV[4]   by stream (msgpack list of four): rows, rows with an ident, bytes of ids, and records
--           that the worker folded
-- ARGV[5]   by stream: its incarnation if it is new (u64)
-- ARGV[6]   by stream: the log's generation that the worker knows of (u32), and the incarnation
--           that it keeps or zeros (u64)
-- ARGV[7]   records, 32 bytes a row, streams in the order of KEYS; no ident twice in a stream
-- ARGV[8]   idents in decimal, 19 characters each, zeros for none (msgpack list by row), or ""
-- ARGV[9]   ids, each after its length in one byte
-- ARGV[10]  sources: "" or, per row, index (u16, 0 for none) and offset (double)
-- ARGV[11]  names of the sources (msgpack list)
-- ARGV[12]  horizon of ids in seconds
-- ARGV[13]  worker
-- ARGV[14]  name of the store that the worker takes this for
-- ARGV[15]  name under which the worker's previous call is remembered, "" if it trusts nothing
-- ARGV[16]  idents of a set
--
-- Reply     {lists, versions, tails, blobs, trust}
--   lists   msgpack: rows seen before, from 0; by stream the row number that followed its last one
--           before this call, that up to which its snapshot holds it, and its status
--   status  0 cold, 1 new (nothing to read), 2 kept (its tail holds what was not folded)
--   versions  by stream: generation and incarnation of its log, 12 bytes as in the header
--   tails   records that were in the logs before this call and not folded, of the kept streams
--   blobs   snapshot and log of each cold stream, right after this call
--   trust   1 or 0; -1 for a call sent again: others may have written since, so all is cold
local LONG = 32  -- rows from which on a stream's idents are in sets, not only in its log
local COLD, NEW, KEPT = 0, 1, 2
local NONE, NO_IDENT = string.rep('\0', 8), string.rep('0', 19)

local tag, token, known_versions = ARGV[1], ARGV[2], ARGV[6]
local records, ids, places = ARGV[7], ARGV[9], ARGV[10]
local rows_of, named_of, id_bytes, folded_of = unpack(cmsgpack.unpack(ARGV[4]))
local calls, pending, last = tag .. 'calls', tag .. 'pending', tag .. 'last/' .. ARGV[13]
local to_seen, to_ids = tag .. 'seen/', tag .. 'ids/'
local find, concat, n, prefix = string.find, table.concat, #KEYS, #tag + 5

local function get(keys)
  if #keys <= 4000 then return #keys > 0 and call('MGET', unpack(keys)) or {} end
  local values = {}
  for k = 1, #keys, 4000 do
    local some = call('MGET', unpack(keys, k, min(k + 3999, #keys)))
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
  local absent, row = unpack(cmsgpack.unpack(before))
  local blobs, versions, snapped, status = blobs_of(KEYS), {}, {}, {}
  for i = 1, n do
    local log = blobs[2 * i] or string.rep('\0', 32)
    versions[i], snapped[i], status[i] = sub(log, 5, 16), struct.unpack('<i8', log, 25), COLD
  end
  call('SET', last, '', 'EX', 3600)  -- a write, so that WAIT on this connection covers the first run
  return {cmsgpack.pack({absent, row, snapped, status}), concat(versions), '', blobs, -1}
end

-- Read as a whole what a worker's own state says to be short, and the index of the others.
local paths, seens, keys = {}, {}, {last, tag .. 'mark'}
for i = 1, n do
  local key, folded = KEYS[i], folded_of[i]
  local path = sub(key, prefix)
  local seen = to_seen .. path
  paths[i], seens[i], keys[i + 2] = path, seen, folded > 0 and folded < LONG and key or seen
end
local values = get(keys)
if (values[2] or '') ~= ARGV[14] then
  return redis.error_reply('STRANGER the partition belongs to another store')
end
local trusted = ARGV[15] ~= '' and values[1] == ARGV[15]
local idents = ARGV[8] ~= '' and cmsgpack.unpack(ARGV[8])

local function in_log(log, ident)
  local at = find(log, ident, 33, true)
  while at do
    if at % 32 == 9 then return true end
    at = find(log, ident, at + 1, true)
  end
  return false
end

-- Return the idents of rows that are not known, and the first and last place of them.
local function idents_of(from, to, named, known)
  if named == to - from + 1 and not known then return idents, from, to end
  local some, m = {}, 0
  if named > 0 then
    for j = from, to do
      if idents[j] ~= NO_IDENT and not (known and known[j]) then
        m = m + 1
        some[m] = idents[j]
      end
    end
  end
  return some, 1, m
end

-- Return the idents in a log, in decimal.
local function idents_in(log)
  local earlier = {}
  for at = 41, #log - 23, 32 do
    if sub(log, at, at + 7) ~= NONE then
      local a, b, c = struct.unpack('<I3I3I2', log, at)  -- a + 2^24 b + 2^48 c, below 2^53 each
      local low = a + 6777216 * b + 6710656 * c
      local high = math.floor(low / 1e7) + b + 28147497 * c
      earlier[#earlier + 1] = string.format('%.0f%07.0f', high, low % 1e7)
    end
  end
  return earlier
end

local sources, marks = places ~= '' and cmsgpack.unpack(ARGV[11]), {}

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

local logs, indices, fresh, knowns, splits = {}, {}, {}, {}, {}
local from = 1
for i = 1, n do
  local to, key, index, log = from + rows_of[i] - 1, KEYS[i], values[i + 2], false
  if keys[i + 2] == key then
    index, log = false, index or ''
  elseif not index then
    log = call('GET', key) or ''
  end
  if log and log ~= '' and struct.unpack('<i8', log, 17) + #log / 32 - 1 >= LONG then
    index = call('GET', seens[i])
    fresh[i] = not index
    index, log = index or sub(log, 1, 32), false
  end

  local known = sources and below_marks(paths[i], from, to)
  if index then
    if named_of[i] > 0 then
      local some, first, last = idents_of(from, to, named_of[i])
      local found
      found, splits[i] = look_up(seens[i], index, some, first, last)
      if found then
        known = known or {}
        for j = from, to do
          if found[idents[j]] then known[j] = true end
        end
      end
    end
  elseif log ~= '' and named_of[i] > 0 then
    for j = from, to do
      local ident = sub(records, 32 * j - 23, 32 * j - 16)
      if ident ~= NONE and in_log(log, ident) then
        known = known or {}
        known[j] = true
      end
    end
  end
  indices[i], logs[i], knowns[i] = index, log, known or false
  from = to + 1
end

-- Tell whether what the worker keeps of a stream goes on.
local function goes_on(i, version, base, row)
  local folded = folded_of[i]
  if not trusted or folded < base or folded > row or row % 1 > 0 then return false end
  local kept = sub(known_versions, 12 * i - 11, 12 * i)
  return version == kept or sub(version, 5) == sub(kept, 5)
    and struct.unpack('<I4', version) >= struct.unpack('<I4', kept)
end

local horizon, shard = tonumber(ARGV[12]), tonumber(ARGV[16])
local goes = string.format('%010d', (math.floor(now / horizon) + 2) * horizon + DAY)
local absent, rows_before, snapped, status, versions = {}, {}, {}, {}, {}
local tails, cold, dirty = {}, {}, {}
local touched, id = 0, 1
from = 1
for i = 1, n do
  local path, key, rows, log, index, known =
    paths[i], KEYS[i], rows_of[i], logs[i], indices[i], knowns[i]
  local to, id_end, taken = from + rows - 1, id + id_bytes[i] - 1, rows
  local chunk, id_chunk
  if not known then
    chunk, id_chunk = sub(records, 32 * from - 31, 32 * to), sub(ids, id, id_end)
  else
    local cells, texts = {}, {}
    for j = from, to do
      local id_next = id + string.byte(ids, id) + 1
      if known[j] then
        absent[#absent + 1] = j - 1
      else
        cells[#cells + 1] = sub(records, 32 * j - 31, 32 * j)
        texts[#texts + 1] = sub(ids, id, id_next - 1)
      end
      id = id_next
    end
    taken, chunk, id_chunk = #cells, concat(cells), concat(texts)
  end

  local row, base, folded, version
  local held = index or log  -- begins with the header
  if held == '' then
    version = '\0\0\0\0' .. sub(ARGV[5], 8 * i - 7, 8 * i)
    row, folded, status[i] = 0, 0, NEW
  else
    version, base, folded = sub(held, 5, 16), struct.unpack('<i8i8', held, 17)
    local size = log and #log
      or taken > 0 and call('APPEND', key, chunk) - #chunk or call('STRLEN', key)
    row = base + size / 32 - 1
    if goes_on(i, version, base, row) then
      status[i] = KEPT
      local a, z = 32 * (folded_of[i] - base + 1), 32 * (row - base + 1)
      if a < z then
        tails[#tails + 1] = log and sub(log, a + 1) or call('GETRANGE', key, a, z - 1)
      end
    else
      row, status[i], cold[#cold + 1] = math.floor(row), COLD, key
    end
  end
  rows_before[i], snapped[i], versions[i] = row, folded, version

  if taken > 0 then
    if index then
      local after = index
      if named_of[i] > 0 then
        local some, first, last = idents_of(from, to, named_of[i], known)
        local parts = not known and splits[i]
        after = remember(seens[i], index, some, first, last, row, goes, shard, parts)
      end
      if after ~= index or fresh[i] then write(seens[i], after, goes) end
    else
      local header = sub(log, 1, 32)
      if log == '' then
        header = '\1\0\0\0' .. version .. string.rep('\0', 16)
        call('SET', key, header .. chunk)
        local tenant, merchant, rest = string.match(path, '^([^/]*)/([^/]*)/(.*)$')
        call('SADD', tag .. 'of/' .. tenant .. '/' .. merchant, rest)
      elseif row + taken < LONG then
        call('SET', key, log .. chunk)  -- APPEND would over-allocate
      else
        call('APPEND', key, chunk)
      end
      if row + taken >= LONG then
        local all, some, first, last = idents_in(log), idents_of(from, to, named_of[i], known)
        for k = first, last do all[#all + 1] = some[k] end
        write(seens[i], remember(seens[i], header, all, 1, #all, 0, goes, shard), goes)
      end
    end
    call('APPEND', to_ids .. path, id_chunk)
    for source, mark in pairs(marks[path] or {}) do
      call('HSET', tag .. 'marks/' .. path, sources[source], string.format('%.0f', mark))
    end
    touched = touched + 2
    dirty[touched - 1], dirty[touched] = path, token
  end
  from, id = to + 1, id_end + 1
end
call('HSET', calls, token, cmsgpack.pack({absent, rows_before, paths}))
call('ZADD', pending, now * 1000 + math.floor(time[2] / 1000), token)
for k = 1, touched, 4000 do
  call('HSET', tag .. 'dirty', unpack(dirty, k, min(k + 3999, touched)))
end
local judged = {}
for k = 1, #ARGV[3], 16 do judged[#judged + 1] = sub(ARGV[3], k, k + 15) end
for k = 1, #judged, 4000 do
  local to = min(k + 3999, #judged)
  call('HDEL', calls, unpack(judged, k, to))
  call('ZREM', pending, unpack(judged, k, to))
end
call('SET', last, trusted and token or '-' .. token, 'EX', 3600)
return {
  cmsgpack.pack({absent, rows_before, snapped, status}), concat(versions), concat(tails),
  blobs_of(cold), trusted and 1 or 0,
}
