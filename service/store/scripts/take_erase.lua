-- use: slots, outbox
-- Close the door on a person's past: from now on no event up to the erasure's time is taken any more.
-- KEYS[1] seq:{b} · KEYS[2] outbox:{b} · KEYS[3] name · KEYS[4] erased · KEYS[5] heard (packed)
-- ARGV[1] now, microseconds · ARGV[2] lifetime, ms · ARGV[3] person id · ARGV[4] event id hash ·
--   ARGV[5] event time, ms · ARGV[6] outbox piece
-- Returns {outcome, 0, low, all that is outstanding in the bucket, this one last}
-- Costs 6 to 9 commands.
local event_ms = tonumber(ARGV[5])
local known = redis.call('GET', KEYS[3])
if known and known ~= ARGV[3] then
  return { 3, 0, 0, {} }
end
local heard = redis.call('GET', KEYS[5]) or ''
if find_slot(heard, ARGV[4], 16) then
  return { 1, 0, outbox_low(KEYS[2]), outbox_with(KEYS[2], ARGV[4]) }
end
local erased_ms = tonumber(redis.call('GET', KEYS[4]))
if erased_ms and event_ms <= erased_ms then
  return { 1, 0, outbox_low(KEYS[2]), {} }
end
redis.call('SET', KEYS[4], ARGV[5], 'PX', ARGV[2])
redis.call('SET', KEYS[5], heard .. ARGV[4] .. pack_stamp(event_ms, 0), 'PX', ARGV[2])
put_outbox(KEYS[1], KEYS[2], ARGV[1], ARGV[6])
return { 0, 0, outbox_low(KEYS[2]), redis.call('ZRANGE', KEYS[2], 0, -1) }
