#!lua
-- Put a snapshot in place of the records it was folded from, alarms first.
--
-- Invariant: a log's generation counts its compactions, so that of several workers that folded the
-- same log only one gets through; a crossing is in the outbox before the snapshot that forgets it. A
-- log that was rolled back meanwhile lacks the last record folded, or has another in its place.
--
-- KEYS[1]   log
-- KEYS[2]   snapshot
-- KEYS[3]   the new snapshot, under a temporary key
-- KEYS[4]   ids of the rows in the log
-- KEYS[5]   outbox
-- KEYS[6]   index of the stream's idents, if there is one: begins with a copy of the log's header
-- ARGV[1]   tag
-- ARGV[2]   generation and incarnation that were folded (12 bytes as in the header)
-- ARGV[3]   records folded: the first row number that the new snapshot does not hold
-- ARGV[4]   folded records to keep as evidence
-- ARGV[5]   the last of them (32 bytes)
-- ARGV[6..] pairs of outbox field and document
--
-- Reply     1, or 0 if the log was compacted, forgotten or rolled back since
local tag, key, folded = ARGV[1], KEYS[1], tonumber(ARGV[3])
local header = redis.call('GETRANGE', key, 0, 31)
local base = header ~= '' and struct.unpack('<I8', header, 17)
if header == '' or string.sub(header, 5, 16) ~= ARGV[2] or redis.call('EXISTS', KEYS[3]) == 0
  or redis.call('GETRANGE', key, 32 * (folded - base), 32 * (folded - base) + 31) ~= ARGV[5] then
  redis.call('DEL', KEYS[3])
  return 0
end
local generation = struct.unpack('<I4', header, 5)
local new_base = math.max(base, folded - tonumber(ARGV[4]))
local drop = new_base - base
local rest = redis.call('GETRANGE', key, 32 * (drop + 1), -1)
local copied = redis.call('EXISTS', KEYS[6]) == 1
local ids, skip = nil, 1
if drop > 0 then
  ids = redis.call('GET', KEYS[4]) or ''
  for _ = 1, drop do
    skip = skip + 1 + (string.byte(ids, skip) or 0)
  end
end

for k = 6, #ARGV, 2 do redis.call('HSET', KEYS[5], ARGV[k], ARGV[k + 1]) end
redis.call('RENAME', KEYS[3], KEYS[2])
redis.call('PERSIST', KEYS[2])
header = string.sub(header, 1, 4) .. struct.pack('<I4', generation + 1)
  .. string.sub(header, 9, 16) .. struct.pack('<I8I8', new_base, folded)
redis.call('SET', key, header .. rest)
if copied then redis.call('SETRANGE', KEYS[6], 0, header) end
if ids then redis.call('SET', KEYS[4], string.sub(ids, skip)) end
return 1
