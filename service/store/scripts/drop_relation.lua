-- use: slots, once
-- Take out what ties others to an erased person, up to a time, once: the incoming relations where the erased person
-- had declared them, the outgoing ones where the others had.
-- KEYS[1] applied:{b} hash · KEYS[2…] for each of the others: in or tie (hash), mark or out (packed list)
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] the erased person's hash ·
--   ARGV[5] time of the erasure, ms
-- Returns how many relations went
-- Costs 1 command and 1 to 4 a person.
if not once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3])) then
  return 0
end
local gone = 0
for i = 2, #KEYS, 2 do
  local stood = redis.call('HGET', KEYS[i], ARGV[4])
  if stood and slot_ms('--------' .. stood, 1) <= tonumber(ARGV[5]) then
    gone = gone + redis.call('HDEL', KEYS[i], ARGV[4])
    local list = redis.call('GET', KEYS[i + 1]) or ''
    local at = find_slot(list, ARGV[4], 16)
    if at and #list == 16 then
      redis.call('DEL', KEYS[i + 1])
    elseif at then
      redis.call('SET', KEYS[i + 1], string.sub(list, 1, at - 1) .. string.sub(list, at + 16))
    end
  end
end
return gone
