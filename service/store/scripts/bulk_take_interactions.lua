-- use: slots, rows, outbox, person
-- Append whole runs of new interactions to the rows of a bucket's people, as take_interactions.lua does one by one.
-- KEYS[1] seq:{b} integer · KEYS[2] outbox:{b} sorted set · then 7 for each person:
--   row, ids, who (packed lists), name, erased (strings), undo, heard (packed lists)
-- ARGV[1] now, microseconds · ARGV[2] oldest time kept, ms · ARGV[3] lifetime of the keys, ms ·
--   ARGV[4] most edges a person may have · ARGV[5] id hashes of all events, person by person (8 bytes each, none
--   twice for one person) · ARGV[6] edges beside them (16 bytes each) · ARGV[7] hashes of the posts' authors beside
--   them (8 bytes each, zeros unknown) · ARGV[8] their outbox pieces, packed · ARGV[9] for each person the number of
--   events and of bytes of pieces (4 bytes each) · then for each person: id
-- Returns {number or 0, low, {place of a person, from 1, and a digit for each event, for those where not all were
-- taken}, outstanding entries of repeated events}; digits are the outcomes of take_interactions.lua
-- Costs 5 to 14 commands a person and 4 in all.
local now_us, oldest_ms, ttl_ms, limit = ARGV[1], tonumber(ARGV[2]), ARGV[3], tonumber(ARGV[4])
local all_ids, all_edges, all_who, all_pieces, sizes = ARGV[5], ARGV[6], ARGV[7], ARGV[8], ARGV[9]
local NOBODY = string.rep('\0', 8)
-- What has at least this long to live is not prolonged: it makes less than an hour of more than a day to spare.
local FRESH_MS = tonumber(ttl_ms) - 3600000
-- Ids of a row that is rewritten rather than appended to (lib/rows.lua).
local REWRITTEN_IDS = REWRITTEN_BYTES / 2
local outstanding, wanted = nil, {}
local starts, ends, kept, whole, exceptions = {}, {}, {}, true, {}

-- Which outstanding entries hold a repeated event: looked at only where there are any.
local function note_outstanding(id_hash)
  outstanding = outstanding or redis.call('ZRANGE', KEYS[2], 0, -1)
  for i, member in ipairs(outstanding) do
    if not wanted[i] and string.find(member, id_hash, 17, true) then
      wanted[i] = true
    end
  end
end

local function judge(person, id_hash, edge_ms)
  if find_slot(person.ids, id_hash, 8) or find_slot(person.heard, id_hash, 16) then
    note_outstanding(id_hash)
    return 1
  end
  local refusal = refuse_person(person.name_key, person.erased_key, person.id, edge_ms, ttl_ms)
  if refusal then
    return refusal
  end
  if person.count >= limit then
    return 4
  end
  person.count = person.count + 1
  return find_slot(person.undo, id_hash, 16) and 5 or 0
end

-- Whether a run may be appended as it is.
local function simple(old, known, erased, undo, heard, id, ids)
  if erased or undo or (known and known ~= id) or #old + #ids > 8 * limit then
    return false
  end
  if old ~= '' or heard ~= '' then
    for at = 1, #ids, 8 do
      local id_hash = string.sub(ids, at, at + 7)
      if find_slot(old, id_hash, 8) or (heard ~= '' and find_slot(heard, id_hash, 16)) then
        return false
      end
    end
  end
  return true
end

local function integer(text, at)
  local a, b, c, d = string.byte(text, at, at + 3)
  return a + b * 256 + c * 65536 + d * 16777216
end

-- Judge a run event by event. Returns what is to be appended, and the pieces of what is taken.
local function picked(place, person, ids, edges, who, piece_at)
  local digits, new_ids, new_edges, new_who, pieces = {}, {}, {}, {}, {}
  for i = 1, #ids / 8 do
    local id_hash, edge = string.sub(ids, 8 * i - 7, 8 * i), string.sub(edges, 16 * i - 15, 16 * i)
    local author, last = string.sub(who, 8 * i - 7, 8 * i), piece_at + 4 + integer(all_pieces, piece_at + 1)
    local outcome = judge(person, id_hash, slot_ms(edge, 1))
    if outcome == 5 then
      edge = string.sub(edge, 1, 9) .. string.char(string.byte(edge, 10) + 128) .. string.sub(edge, 11)
      author = NOBODY
    elseif outcome == 0 then
      pieces[#pieces + 1] = string.sub(all_pieces, piece_at, last)
    end
    if outcome == 0 or outcome == 5 then
      new_ids[#new_ids + 1], new_edges[#new_edges + 1], new_who[#new_who + 1] = id_hash, edge, author
    end
    digits[i], piece_at = outcome, last + 1
  end
  exceptions[#exceptions + 1] = place
  exceptions[#exceptions + 1] = table.concat(digits)
  return table.concat(new_ids), table.concat(new_edges), table.concat(new_who), table.concat(pieces)
end

local function keep_name(name_key, known, id)
  if not known then
    redis.call('SET', name_key, id, 'PX', ttl_ms)
    return
  end
  local left_ms = redis.call('PTTL', name_key)
  if left_ms >= 0 and left_ms < FRESH_MS then
    redis.call('PEXPIRE', name_key, ttl_ms)
  end
end

local function append_all(k, old_row, old_ids, old_who, edges, ids, who)
  if #old_ids + #ids <= REWRITTEN_IDS then
    redis.call('SET', KEYS[k], old_row .. edges, 'PX', ttl_ms)
    redis.call('SET', KEYS[k + 1], old_ids .. ids, 'PX', ttl_ms)
    redis.call('SET', KEYS[k + 2], old_who .. who, 'PX', ttl_ms)
  else
    for i, added in ipairs({ edges, ids, who }) do
      redis.call('APPEND', KEYS[k + i - 1], added)
      redis.call('PEXPIRE', KEYS[k + i - 1], ttl_ms)
    end
  end
end

local function read_lists(k)
  local found =
    redis.call('MGET', KEYS[k], KEYS[k + 1], KEYS[k + 2], KEYS[k + 3], KEYS[k + 4], KEYS[k + 5], KEYS[k + 6])
  return found[1] or '', found[2] or '', found[3] or '', found[4], found[5], found[6], found[7] or ''
end

local at, piece_at = 1, 1
for place = 1, (#KEYS - 2) / 7 do
  local k, id = 7 * place - 4, ARGV[9 + place]
  local count, piece_bytes = integer(sizes, 8 * place - 7), integer(sizes, 8 * place - 3)
  local last, piece_last = at + count - 1, piece_at + piece_bytes - 1
  local ids, edges = string.sub(all_ids, 8 * at - 7, 8 * last), string.sub(all_edges, 16 * at - 15, 16 * last)
  local who = string.sub(all_who, 8 * at - 7, 8 * last)
  local old_row, old_ids, old_who, known, erased, undo, heard = read_lists(k)
  if old_row ~= '' and slot_ms(old_row, 1) < oldest_ms then
    trim_row(KEYS[k], KEYS[k + 1], KEYS[k + 2], oldest_ms)
    old_row, old_ids, old_who = read_lists(k)
  end
  if simple(old_ids, known, erased, undo, heard, id, ids) then
    keep_name(KEYS[k + 3], known, id)
    starts[place], ends[place] = piece_at, piece_last
  else
    local person = { ids = old_ids, count = #old_ids / 8, undo = undo or '', heard = heard, id = id,
      name_key = KEYS[k + 3], erased_key = KEYS[k + 4] }
    ids, edges, who, kept[place] = picked(place, person, ids, edges, who, piece_at)
    whole = false
  end
  if ids ~= '' then
    append_all(k, old_row, old_ids, old_who, edges, ids, who)
  end
  at, piece_at = last + 1, piece_last + 1
end

local pieces = all_pieces
if not whole then
  for place = 1, (#KEYS - 2) / 7 do
    kept[place] = kept[place] or string.sub(all_pieces, starts[place], ends[place])
  end
  pieces = table.concat(kept)
end
local seq, unsettled = pieces ~= '' and put_outbox(KEYS[1], KEYS[2], now_us, pieces) or 0, {}
for i, member in ipairs(outstanding or {}) do
  unsettled[#unsettled + 1] = wanted[i] and member or nil
end
return { seq, outbox_low(KEYS[2]), exceptions, unsettled }
