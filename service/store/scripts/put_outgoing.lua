-- use: slots, later
-- Write a relation on the side of the person who declared it and close its outbox entry; the latest stands.
-- KEYS[1] outbox:{b} · KEYS[2] name · KEYS[3] tie (hash) · KEYS[4] out (packed list)
-- ARGV[1] number of the entry · ARGV[2] target hash · ARGV[3] event time, ms · ARGV[4] relation code (0 none) ·
--   ARGV[5] event id · ARGV[6] oldest time kept, ms
-- Returns 1, or 0 where the entry was closed before
-- Costs 2 to 7 commands.
if redis.call('ZREMRANGEBYSCORE', KEYS[1], ARGV[1], ARGV[1]) == 0 then
  return 0
end
local event_ms, oldest_ms = tonumber(ARGV[3]), tonumber(ARGV[6])
local stood = redis.call('HGET', KEYS[3], ARGV[2])
if stood and not later(event_ms, ARGV[5], slot_ms('--------' .. stood, 1), string.sub(stood, 9)) then
  return 1
end
local stamp = pack_stamp(event_ms, tonumber(ARGV[4]))
redis.call('HSET', KEYS[3], ARGV[2], stamp .. ARGV[5])
redis.call('PERSIST', KEYS[2])

local out = redis.call('GET', KEYS[4]) or ''
local at = find_slot(out, ARGV[2], 16)
if at then
  out = string.sub(out, 1, at - 1) .. string.sub(out, at + 16)
end
if ARGV[4] ~= '0' then
  out = out .. ARGV[2] .. stamp
end
if out == '' then
  redis.call('DEL', KEYS[4])
else
  redis.call('SET', KEYS[4], out)
end

-- A `none` older than retention can no longer be contradicted: it leaves.
if redis.call('HLEN', KEYS[3]) > 64 + 2 * #out / 16 then
  local flat = redis.call('HGETALL', KEYS[3])
  for i = 1, #flat, 2 do
    local value = '--------' .. flat[i + 1]
    if slot_code(value, 1) == 0 and slot_ms(value, 1) < oldest_ms then
      redis.call('HDEL', KEYS[3], flat[i])
    end
  end
end
return 1
