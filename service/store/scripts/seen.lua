-- Idents seen of a stream, as sets of integers small enough that a server keeps them as arrays.
--
-- An index of a stream ("{tag}seen/<path>") names its groups of sets, 24 characters each: in decimal
-- the time when the group goes (10), its level (1) and the stream's row number when it was begun
-- (13). A group of level l has 10^l sets of about 400 idents, by their last l digits. When it is
-- full, one of the next level is begun; when an epoch of the server's clock is over, one of the same
-- level. A group goes a horizon and a day after the end of its epoch, whatever the horizon is by
-- then.
local SHARD, DAY = 400, 86400

local call, sub = redis.call, string.sub

-- Return idents by the set of a group that they belong to.
local function by_set(group, level, idents)
  local sets = {}
  for k = 1, #idents do
    local name = group .. sub(idents[k], -level)
    local members = sets[name]
    if members then members[#members + 1] = idents[k] else sets[name] = {idents[k]} end
  end
  return sets
end

-- Return those of some idents that a set holds, as keys of a table; nil for none.
local function in_set(name, idents, found)
  for k = 1, #idents, 4000 do
    local there = call('SMISMEMBER', name, unpack(idents, k, math.min(k + 3999, #idents)))
    for m = 1, #there do
      if there[m] == 1 then
        found = found or {}
        found[idents[k + m - 1]] = true
      end
    end
  end
  return found
end

-- Return those of some idents that a stream's sets hold, as keys of a table; nil for none.
local function look_up(seen, index, idents, now)
  local found
  for at = 1, #index, 24 do
    local group, level = seen .. sub(index, at, at + 10), sub(index, at + 10, at + 10)
    if sub(index, at, at + 9) <= now then
      -- gone
    elseif level == '0' then
      found = in_set(group, idents, found)
    else
      for name, members in pairs(by_set(group, level, idents)) do
        found = in_set(name, members, found)
      end
    end
  end
  return found
end

-- Begin a group of an epoch's sets at row number `row`; return its level.
local function begin(seen, index, goes, row, now)
  local level, latest, groups = 0, goes, ''
  for at = 1, #index, 24 do
    local other = sub(index, at, at + 9)
    if other > now then
      level = sub(index, at + 10, at + 10) + (other == goes and 1 or 0)
      if other > latest then latest = other end
      groups = groups .. sub(index, at, at + 23)
    end
  end
  groups = groups .. string.format('%s%d%013d', goes, level, row)
  call('SET', seen, groups, 'EXAT', latest)
  return groups
end

-- Remember idents of rows from number `row` on in the epoch that goes at a time.
local function remember(seen, index, idents, row, goes, now)
  local k = 1
  while k <= #idents do
    local at = #index - 23
    while at > 0 and sub(index, at, at + 9) ~= goes do at = at - 24 end
    local level = at > 0 and sub(index, at + 10, at + 10)
    local began = level and tonumber(sub(index, at + 11, at + 23))
    local room = level and began + SHARD * 10 ^ level - row or 0
    if room <= 0 then
      index = begin(seen, index, goes, row, now)
    else
      local group, part = seen .. goes .. level, idents
      if k > 1 or #idents > math.min(room, 4000) then
        part = {unpack(idents, k, math.min(#idents, k + 3999, k + room - 1))}
      end
      local sets = level == '0' and {[group] = part} or by_set(group, level, part)
      local young = row - began < 20 * 10 ^ level  -- some of its sets may not exist yet
      for name, members in pairs(sets) do
        call('SADD', name, unpack(members))
        if young then call('EXPIREAT', name, goes) end
      end
      k, row = k + #part, row + #part
    end
  end
end
