#!lua
-- Publish crossings of one tenant: the alarm's own hash, and on first sight the feed.
--
-- Invariant: the first crossings of an alarm and its latest are kept, whoever publishes them, however
-- often and in whatever order; an alarm is in the feed at most once, and its cursor is its entry there. Crossings of history stay off the feed.
--
-- KEYS[1]   feed
-- KEYS[i+1] alarm of crossing i
-- ARGV      for crossing i: alarm id, ordinal, "1" if historic, document, path (5 each)
--
-- Reply     the cursor of each crossing's alarm, "" while it is off the feed
local KEPT = 16  -- FEW_CROSSINGS in streams/crossing.py
local cursors = {}
for i = 1, #KEYS - 1 do
  local key = KEYS[i + 1]
  local id, ordinal, historic = ARGV[5 * i - 4], tonumber(ARGV[5 * i - 3]), ARGV[5 * i - 2]
  local document, path = ARGV[5 * i - 1], ARGV[5 * i]
  redis.call('HSETNX', key, 'path', path)
  if ordinal < KEPT then redis.call('HSETNX', key, ordinal, document) end
  local latest = tonumber(redis.call('HGET', key, 'latest_ordinal') or -1)
  if ordinal > latest then
    redis.call('HSET', key, 'latest_ordinal', ordinal, 'latest', document)
  end
  local cursor = redis.call('HGET', key, 'cursor')
  if not cursor and historic ~= '1' then
    cursor = redis.call('XADD', KEYS[1], '*', 'alarm', id)
    redis.call('HSET', key, 'cursor', cursor)
  end
  cursors[i] = cursor or ''
end
return cursors
