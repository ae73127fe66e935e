-- use: slots, rows, outbox, person, heard
-- Take post events of a bucket's people, each with an outbox entry of its own.
-- KEYS[1] seq:{b} · KEYS[2] outbox:{b} · then for each event: name, erased, ids, heard, row, who
-- ARGV[1] now, microseconds · ARGV[2] oldest time kept, ms · ARGV[3] lifetime, ms · ARGV[4] most edges in a row ·
--   ARGV[5] most events that are no edges ·
--   then for each event: person id, event id hash, event time in ms, outbox piece, post hash
-- Returns for each event {outcome, number or 0, low, outstanding entries to settle first: those of the same post};
--   outcomes as in take_interactions.lua
-- Costs 10 to 16 commands an event, 6 more where old edges leave.
local oldest_ms, ttl_ms, row_limit, most = tonumber(ARGV[2]), ARGV[3], tonumber(ARGV[4]), tonumber(ARGV[5])

local function take(at, name_key, erased_key, ids_key, heard_key, row_key, who_key)
  local id_hash, event_ms = ARGV[at + 1], tonumber(ARGV[at + 2])
  local heard = redis.call('GET', heard_key) or ''
  if find_slot(heard, id_hash, 16) or find_slot(redis.call('GET', ids_key) or '', id_hash, 8) then
    return { 1, 0, outbox_low(KEYS[2]), outbox_with(KEYS[2], id_hash) }
  end
  local refusal = refuse_person(name_key, erased_key, ARGV[at], event_ms, ttl_ms)
  if refusal then
    return { refusal, 0, 0, {} }
  end
  trim_row(row_key, ids_key, who_key, oldest_ms)
  if heard_full(heard, oldest_ms, most) or redis.call('STRLEN', row_key) / 16 >= row_limit then
    return { 4, 0, 0, {} }
  end
  remember(heard_key, heard, id_hash, event_ms, oldest_ms, ttl_ms)
  local before = outbox_with(KEYS[2], ARGV[at + 4])
  local seq = put_outbox(KEYS[1], KEYS[2], ARGV[1], ARGV[at + 3])
  return { 0, seq, outbox_low(KEYS[2]), before }
end

local answers, at = {}, 6
for i = 3, #KEYS, 6 do
  answers[#answers + 1] = take(at, KEYS[i], KEYS[i + 1], KEYS[i + 2], KEYS[i + 3], KEYS[i + 4], KEYS[i + 5])
  at = at + 5
end
return answers
