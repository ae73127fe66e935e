-- use: slots, rows, outbox, person
-- Append a bucket's new interactions to their actors' rows and number what they change elsewhere.
-- KEYS[1] seq:{b} integer · KEYS[2] outbox:{b} sorted set · then 7 for each person:
--   row, ids, who (packed lists), name, erased (strings), undo, heard (packed lists)
-- ARGV[1] now, microseconds · ARGV[2] oldest time kept, ms · ARGV[3] lifetime of the keys, ms ·
--   ARGV[4] most edges a person may have · then for each person: id, number of events, and for each event:
--   id hash (8 bytes), edge (16 bytes), outbox piece
-- Returns {outcome for each event, number or 0, low, outstanding entries of repeated events}
--   outcomes: 0 taken, 1 repeated, 2 erased, 3 another id with this hash, 4 row full, 5 taken back already
-- Costs 12 commands a person and 4 in all.
local now_us, oldest_ms, ttl_ms, limit = ARGV[1], tonumber(ARGV[2]), ARGV[3], tonumber(ARGV[4])
local outcomes, pieces, unsettled, at = {}, {}, {}, 5

local function judge(person, id_hash, edge)
  if find_slot(person.ids, id_hash, 8) or find_slot(person.heard, id_hash, 16) then
    for _, member in ipairs(outbox_with(KEYS[2], id_hash)) do
      unsettled[#unsettled + 1] = member
    end
    return 1
  end
  local refusal = refuse_person(person.name_key, person.erased_key, person.id, slot_ms(edge, 1), ttl_ms)
  if refusal then
    return refusal
  end
  if person.count >= limit then
    return 4
  end
  return find_slot(person.undo, id_hash, 16) and 5 or 0
end

local function take(person, id_hash, edge, piece)
  local outcome = judge(person, id_hash, edge)
  outcomes[#outcomes + 1] = outcome
  if outcome == 5 then
    edge = string.sub(edge, 1, 9) .. string.char(string.byte(edge, 10) + 128) .. string.sub(edge, 11)
  elseif outcome == 0 then
    pieces[#pieces + 1] = piece
  else
    return
  end
  person.ids = person.ids .. id_hash
  person.count = person.count + 1
  person.edges[#person.edges + 1] = edge
  person.added[#person.added + 1] = id_hash
end

for i = 3, #KEYS, 7 do
  local row_key, ids_key, who_key = KEYS[i], KEYS[i + 1], KEYS[i + 2]
  trim_row(row_key, ids_key, who_key, oldest_ms)
  local person = { id = ARGV[at], ids = redis.call('GET', ids_key) or '', undo = redis.call('GET', KEYS[i + 5]) or '',
    heard = redis.call('GET', KEYS[i + 6]) or '', name_key = KEYS[i + 3], erased_key = KEYS[i + 4], edges = {},
    added = {} }
  person.count = #person.ids / 8
  local last = at + 1 + 3 * tonumber(ARGV[at + 1])
  for j = at + 2, last, 3 do
    take(person, ARGV[j], ARGV[j + 1], ARGV[j + 2])
  end
  at = last + 1
  if #person.edges > 0 then
    append(row_key, table.concat(person.edges), ttl_ms)
    append(ids_key, table.concat(person.added), ttl_ms)
    append(who_key, string.rep('\0', 8 * #person.edges), ttl_ms)
  end
end

local seq = #pieces > 0 and put_outbox(KEYS[1], KEYS[2], now_us, table.concat(pieces)) or 0
return { outcomes, seq, outbox_low(KEYS[2]), unsettled }
