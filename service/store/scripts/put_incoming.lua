-- use: slots, once, later
-- Write a relation on the side of the person it is about, once; the latest stands.
-- KEYS[1] applied:{b} hash · KEYS[2] name · KEYS[3] erased · KEYS[4] in (hash) · KEYS[5] mark (packed list)
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] source hash · ARGV[5] target id ·
--   ARGV[6] event time, ms · ARGV[7] relation code · ARGV[8] event id · ARGV[9] 1 where the relation is marked ·
--   ARGV[10] oldest time kept, ms
-- Returns 0, or 2 where the target was erased at or after the event's time, or 3 where another id has its hash
-- Costs 3 to 10 commands.
local event_ms = tonumber(ARGV[6])
local known = redis.call('GET', KEYS[2])
if known and known ~= ARGV[5] then
  return 3
end
local erased_ms = tonumber(redis.call('GET', KEYS[3]))
if erased_ms and event_ms <= erased_ms then
  return 2
end
if not once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3])) then
  return 0
end
redis.call('SET', KEYS[2], ARGV[5])
local stood = redis.call('HGET', KEYS[4], ARGV[4])
if stood and not later(event_ms, ARGV[8], slot_ms('--------' .. stood, 1), string.sub(stood, 9)) then
  return 0
end
local stamp = pack_stamp(event_ms, tonumber(ARGV[7]))
redis.call('HSET', KEYS[4], ARGV[4], stamp .. ARGV[8])

-- A `none` older than retention can no longer be contradicted. Some entries by chance are looked at with each write, so
-- that such traces leave about as fast as they come.
local some = redis.call('HRANDFIELD', KEYS[4], 4, 'WITHVALUES')
for i = 1, #some, 2 do
  local value = '--------' .. some[i + 1]
  if slot_code(value, 1) == 0 and slot_ms(value, 1) < tonumber(ARGV[10]) then
    redis.call('HDEL', KEYS[4], some[i])
  end
end

local marks = redis.call('GET', KEYS[5]) or ''
local at = find_slot(marks, ARGV[4], 16)
if at then
  marks = string.sub(marks, 1, at - 1) .. string.sub(marks, at + 16)
end
if ARGV[9] == '1' then
  marks = marks .. ARGV[4] .. stamp
end
if marks == '' then
  redis.call('DEL', KEYS[5])
else
  redis.call('SET', KEYS[5], marks)
end
return 0
