-- use: slots, outbox, person, heard
-- Take back one's own interaction: mark its edge, or keep the word until the interaction comes.
-- KEYS[1] seq:{b} · KEYS[2] outbox:{b} · KEYS[3] name · KEYS[4] erased · KEYS[5] ids · KEYS[6] heard ·
--   KEYS[7] row · KEYS[8] undo (packed lists but for the first four)
-- ARGV[1] now, microseconds · ARGV[2] oldest time kept, ms · ARGV[3] lifetime, ms · ARGV[4] person id ·
--   ARGV[5] event id hash · ARGV[6] event time, ms · ARGV[7] id hash of what is taken back ·
--   ARGV[8] head of the outbox piece, to which the edge is added · ARGV[9] most events that are no edges
-- Returns {outcome, 0, low, all that is outstanding in the bucket, this one last}
-- Costs 9 to 16 commands.
local event_ms, ttl_ms = tonumber(ARGV[6]), ARGV[3]
local heard, ids = redis.call('GET', KEYS[6]) or '', redis.call('GET', KEYS[5]) or ''
if find_slot(heard, ARGV[5], 16) or find_slot(ids, ARGV[5], 8) then
  return { 1, 0, outbox_low(KEYS[2]), outbox_with(KEYS[2], ARGV[5]) }
end
local refusal = refuse_person(KEYS[3], KEYS[4], ARGV[4], event_ms, ttl_ms)
if refusal then
  return { refusal, 0, 0, {} }
end
if heard_full(heard, tonumber(ARGV[2]), tonumber(ARGV[9])) then
  return { 4, 0, 0, {} }
end
remember(KEYS[6], heard, ARGV[5], event_ms, tonumber(ARGV[2]), ttl_ms)

local undo = drop_older(redis.call('GET', KEYS[8]) or '', tonumber(ARGV[2]))
local known = find_slot(undo, ARGV[7], 16)
local stamp = pack_stamp(event_ms, 0)
if not known then
  undo = undo .. ARGV[7] .. stamp
elseif slot_ms(undo, known) < event_ms then
  undo = string.sub(undo, 1, known + 7) .. stamp .. string.sub(undo, known + 16)
end
redis.call('SET', KEYS[8], undo, 'PX', ttl_ms)

local place = find_slot(ids, ARGV[7], 8)
if not place then
  return { 0, 0, 0, {} }
end
local start = (place - 1) * 2
local edge = redis.call('GETRANGE', KEYS[7], start, start + 15)
if slot_code(edge, 1) >= 16384 then
  return { 0, 0, 0, {} }
end
redis.call('SETRANGE', KEYS[7], start + 9, string.char(string.byte(edge, 10) + 128))
put_outbox(KEYS[1], KEYS[2], ARGV[1], ARGV[8] .. edge)
return { 0, 0, outbox_low(KEYS[2]), redis.call('ZRANGE', KEYS[2], 0, -1) }
