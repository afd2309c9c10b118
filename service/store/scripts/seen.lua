-- Idents seen of a stream, as sets of integers small enough that a server keeps them as arrays.
--
-- A hash counts the idents of each epoch of the server's clock. Level l of an epoch has 8^l sets of
-- about 400 and is filled after the levels below it. An epoch goes a horizon and a day after its
-- end, whatever the horizon is by then; until then its idents are known.
local SHARD, SPREAD, DAY = 400, 8, 86400

local function levels(count)
  local level, room = 0, SHARD
  while count >= room do
    level = level + 1
    room = room + SHARD * SPREAD ^ level
  end
  return level
end

local function shard(seen, epoch, level, ident)
  local number = tonumber(string.sub(ident, -9)) % (SPREAD ^ level)
  return string.format('%s/%s/%d/%d', seen, epoch, level, number)
end

local function epochs_of(seen)
  local counts, epochs = redis.call('HGETALL', seen), {}
  for k = 1, #counts, 2 do
    epochs[#epochs + 1] = {counts[k], levels(tonumber(counts[k + 1]))}
  end
  return epochs
end

local function is_seen(seen, epochs, ident)
  for _, epoch in ipairs(epochs) do
    for level = 0, epoch[2] do
      if redis.call('SISMEMBER', shard(seen, epoch[1], level, ident), ident) == 1 then
        return true
      end
    end
  end
  return false
end

local function remember(seen, idents, now, horizon)
  local number = math.floor(now / horizon)
  local epoch = string.format('%d', number)
  local keeps = (number + 2) * horizon + DAY - now
  local count = redis.call('HINCRBY', seen, epoch, #idents) - #idents
  if count == 0 then  -- a new epoch: forget those that are gone
    for _, other in ipairs(redis.call('HKEYS', seen)) do
      if other ~= epoch and redis.call('EXISTS', shard(seen, other, 0, '0')) == 0 then
        redis.call('HDEL', seen, other)
      end
    end
  end
  redis.call('EXPIRE', seen, keeps)
  local sets = {}
  for k, ident in ipairs(idents) do
    local name = shard(seen, epoch, levels(count + k - 1), ident)
    sets[name] = sets[name] or {}
    table.insert(sets[name], ident)
  end
  for name, members in pairs(sets) do
    redis.call('SADD', name, unpack(members))
    redis.call('EXPIRE', name, keeps)
  end
end
