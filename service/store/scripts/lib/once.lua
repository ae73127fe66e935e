-- Let each numbered effect of a source bucket through once. The field of a source holds the number below which all
-- is settled, then the numbers applied above it. Returns whether the effect is to be applied now.
local function once(applied_key, source, seq, low)
  local stored = redis.call('HGET', applied_key, source)
  local kept, floor = {}, nil
  if stored then
    for text in string.gmatch(stored, '%d+') do
      local number = tonumber(text)
      if not floor then
        floor = number
      else
        if number == seq then
          return false
        end
        kept[#kept + 1] = number
      end
    end
    if seq <= floor then
      return false
    end
  end
  floor = math.max(floor or 0, low)
  local parts = { string.format('%.0f', floor) }
  kept[#kept + 1] = seq
  for _, number in ipairs(kept) do
    if number > floor then
      parts[#parts + 1] = string.format('%.0f', number)
    end
  end
  redis.call('HSET', applied_key, source, table.concat(parts, ','))
  return true
end
