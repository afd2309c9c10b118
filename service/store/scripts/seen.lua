-- Idents seen of a stream, as sets of integers small enough that a server keeps them as arrays.
--
-- An index of a stream ("{tag}seen/<path>") begins with a copy of its log's header, 32 bytes, which
-- is written only where the header is; it may expire, and is then made again. Its groups of sets
-- follow, 19 bytes each, the newest first: the stream's row number when the group was begun (i64),
-- and in decimal the time when it goes (10) and its level (1). A group of level l has 10^l sets of
-- about `shard` idents, by their last l digits. When it is full, one of the next level is begun;
-- when an epoch of the server's clock is over, one of the same level. A group goes a horizon and a
-- day after the end of its epoch, whatever the horizon is by then.
local DAY = 86400

local call, sub, unpack, min = redis.call, string.sub, unpack, math.min
local time = call('TIME')
local now = time[1]
local levels, ends = {}, {}  -- by the name of a group

-- Return a group's name, its level and the time when it goes; level nil if it is gone.
local function group_at(index, at)
  local name = sub(index, at + 8, at + 18)
  if not ends[name] then
    ends[name] = sub(name, 1, 10)
    if ends[name] > now then levels[name] = tonumber(sub(name, 11)) end
  end
  return name, levels[name], ends[name]
end

-- Return idents by their last digits.
local function split(level, idents, from, to)
  local parts = {}
  for k = from, to do
    local ident = idents[k]
    local digits = sub(ident, -level)
    local part = parts[digits]
    if part then part[#part + 1] = ident else parts[digits] = {ident} end
  end
  return parts
end

-- Return those of some idents that a set holds, as keys of a table; nil for none.
local function in_set(name, idents, from, to, found)
  for k = from, to, 4000 do
    local there = call('SMISMEMBER', name, unpack(idents, k, min(k + 3999, to)))
    for m = 1, #there do
      if there[m] == 1 then
        found = found or {}
        found[idents[k + m - 1]] = true
      end
    end
  end
  return found
end

-- Return those of some idents that a stream's sets hold, as keys of a table, nil for none, and the
-- idents as they were split by the level.
local function look_up(seen, index, idents, from, to)
  local found, splits
  for at = 33, #index, 19 do
    local name, level = group_at(index, at)
    if level == 0 then
      found = in_set(seen .. name, idents, from, to, found)
    elseif level then
      splits = splits or {}
      splits[level] = splits[level] or split(level, idents, from, to)
      for digits, part in pairs(splits[level]) do
        found = in_set(seen .. name .. digits, part, 1, #part, found)
      end
    end
  end
  return found, splits
end

-- Return an index without the groups that are gone, and with one more of an epoch's sets, begun at
-- row number `row`.
local function begin(index, goes, row)
  local level, groups = 0, ''
  for at = 33, #index, 19 do
    local _, other, ending = group_at(index, at)
    if other then
      level = math.max(level, other + (ending == goes and 1 or 0))
      groups = groups .. sub(index, at, at + 18)
    end
  end
  return sub(index, 1, 32) .. struct.pack('<i8', row) .. goes .. level .. groups
end

-- Write an index, to be kept until all its groups are gone.
local function write(seen, index, goes)
  local latest = goes
  for at = 33, #index, 19 do
    local _, _, ending = group_at(index, at)
    if ending > latest then latest = ending end
  end
  call('SET', seen, index, 'EXAT', latest)
end

-- Remember idents of rows from number `row` on in the epoch that goes at a time; return the index.
local function remember(seen, index, idents, from, to, row, goes, shard, splits)
  while from <= to do
    local name, level, ending
    local at = 14
    repeat
      at = at + 19
      name, level, ending = group_at(index, at)
    until ending == goes or at > #index
    local began = ending == goes and struct.unpack('<i8', index, at)
    local room = began and began + shard * 10 ^ level - row or 0
    if room <= 0 then
      index = begin(index, goes, row)
    else
      local last = min(to, from + 3999, from + room - 1)
      local young = row - began < (level == 0 and 1 or 20 * 10 ^ level)  -- some sets may not exist
      if level == 0 then
        call('SADD', seen .. name, unpack(idents, from, last))
        if young then call('EXPIREAT', seen .. name, goes) end
      else
        local parts = last == to and splits and splits[level] or split(level, idents, from, last)
        for digits, part in pairs(parts) do
          local key = seen .. name .. digits
          call('SADD', key, unpack(part))
          if young then call('EXPIREAT', key, goes) end
        end
      end
      from, row, splits = last + 1, row + last - from + 1, nil
    end
  end
  return index
end
