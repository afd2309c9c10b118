#!lua
-- Write directory entries of streams, unless they were touched again meanwhile.
--
-- KEYS[1]   dirty
-- KEYS[2]   directory of one tenant
-- ARGV      per stream: path, the call seen in dirty, field, entry (4 each)
for i = 1, #ARGV, 4 do
  redis.call('HSET', KEYS[2], ARGV[i + 2], ARGV[i + 3])
  if redis.call('HGET', KEYS[1], ARGV[i]) == ARGV[i + 1] then
    redis.call('HDEL', KEYS[1], ARGV[i])
  end
end
return #ARGV / 4
