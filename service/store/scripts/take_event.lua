-- use: slots, outbox, person, heard
-- Take an event whose effects lie in other slots: a tie or a withdrawal.
-- KEYS[1] seq:{b} · KEYS[2] outbox:{b} · KEYS[3] name · KEYS[4] erased · KEYS[5] ids · KEYS[6] heard (packed) ·
--   KEYS[7] tie (hash) · KEYS[8] out (packed)
-- ARGV[1] now, microseconds · ARGV[2] oldest time kept, ms · ARGV[3] lifetime, ms · ARGV[4] person id ·
--   ARGV[5] event id hash · ARGV[6] event time, ms · ARGV[7] outbox piece · ARGV[8] most ties, 0 any ·
--   ARGV[9] the tie's target hash · ARGV[10] 1 where an erasure does not undo the event ·
--   ARGV[11] most events that are no edges
-- Returns {outcome, number or 0, low, outstanding entries of the event}; outcomes as in take_interactions.lua
-- Costs 9 to 14 commands.
local event_ms, ttl_ms = tonumber(ARGV[6]), ARGV[3]
local heard = redis.call('GET', KEYS[6]) or ''
if find_slot(heard, ARGV[5], 16) or find_slot(redis.call('GET', KEYS[5]) or '', ARGV[5], 8) then
  return { 1, 0, outbox_low(KEYS[2]), outbox_with(KEYS[2], ARGV[5]) }
end
local refusal = refuse_person(KEYS[3], KEYS[4], ARGV[4], ARGV[10] == '1' and math.huge or event_ms, ttl_ms)
if refusal then
  return { refusal, 0, 0, {} }
end
if heard_full(heard, tonumber(ARGV[2]), tonumber(ARGV[11])) then
  return { 4, 0, 0, {} }
end
local tie_limit = tonumber(ARGV[8])
-- Traces of `none` count for half: they leave when there are more of them than ties (put_outgoing.lua).
local function ties_full()
  return redis.call('STRLEN', KEYS[8]) / 16 >= tie_limit or redis.call('HLEN', KEYS[7]) >= 64 + 2 * tie_limit
end
if tie_limit > 0 and ties_full() and redis.call('HEXISTS', KEYS[7], ARGV[9]) == 0 then
  return { 4, 0, 0, {} }
end
remember(KEYS[6], heard, ARGV[5], event_ms, tonumber(ARGV[2]), ttl_ms)
local seq = put_outbox(KEYS[1], KEYS[2], ARGV[1], ARGV[7])
return { 0, seq, outbox_low(KEYS[2]), {} }
