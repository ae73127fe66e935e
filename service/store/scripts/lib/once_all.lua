-- As `once`, for the numbers of many source buckets together: all of them are let through, or none is.
-- `sources` holds for each the source bucket and effect, the number and the low mark.
local function once_all(applied_key, sources)
  local names, stored, writes = {}, {}, { 'HSET', applied_key }
  for i = 1, #sources, 3 do
    names[#names + 1] = sources[i]
  end
  stored = redis.call('HMGET', applied_key, unpack(names))
  for i = 1, #names do
    local seq, floor, kept = tonumber(sources[3 * i - 1]), tonumber(sources[3 * i]), {}
    local first = true
    for text in string.gmatch(stored[i] or '', '%d+') do
      local number = tonumber(text)
      if (first and seq <= number) or number == seq then
        return false
      end
      floor = first and math.max(floor, number) or floor
      kept[#kept + 1] = not first and number > floor and text or nil
      first = false
    end
    if seq > floor then
      kept[#kept + 1] = string.format('%.0f', seq)
    end
    table.insert(kept, 1, string.format('%.0f', floor))
    writes[#writes + 1] = names[i]
    writes[#writes + 1] = table.concat(kept, ',')
  end
  redis.call(unpack(writes))
  return true
end
