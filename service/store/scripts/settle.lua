#!lua
-- Write directory entries of streams, and note those as settled that were not touched meanwhile.
--
-- Invariant: an entry that is behind is marked dirty. Where the mark is gone, another worker has
-- written an entry at least as new as this one.
--
-- KEYS[1]   dirty
-- KEYS[2]   directory of one tenant
-- ARGV      per stream: path, the call seen in dirty, field, entry (4 each)
for i = 1, #ARGV, 4 do
  local call = redis.call('HGET', KEYS[1], ARGV[i])
  if call then redis.call('HSET', KEYS[2], ARGV[i + 2], ARGV[i + 3]) end
  if call == ARGV[i + 1] then redis.call('HDEL', KEYS[1], ARGV[i]) end
end
return #ARGV / 4
