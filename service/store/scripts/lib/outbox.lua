-- The outbox of a bucket: what an event must still change in other slots, numbered in order.
-- A number is the larger of the last one plus 1 and the time in microseconds, so that it never runs backwards,
-- not even where a server lost its last moments.
local function put_outbox(seq_key, outbox_key, now_us, pieces)
  local seq = math.max((tonumber(redis.call('GET', seq_key)) or 0) + 1, tonumber(now_us))
  local text = string.format('%.0f', seq)
  redis.call('SET', seq_key, text)
  redis.call('ZADD', outbox_key, text, text .. pieces)
  return seq
end

-- The largest number below which nothing is outstanding.
local function outbox_low(outbox_key)
  local first = redis.call('ZRANGE', outbox_key, 0, 0, 'WITHSCORES')
  return first[2] and tonumber(first[2]) - 1 or 0
end

-- Outstanding entries that hold `needle`, in order.
local function outbox_with(outbox_key, needle)
  local found = {}
  for _, member in ipairs(redis.call('ZRANGE', outbox_key, 0, -1)) do
    if string.find(member, needle, 17, true) then
      found[#found + 1] = member
    end
  end
  return found
end
