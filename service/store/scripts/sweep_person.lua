-- use: slots, outbox
-- Take out a person's state up to the time of an erasure, and number what must still go in other slots.
-- KEYS[1] seq:{b} · KEYS[2] outbox:{b} · KEYS[3] row · KEYS[4] ids · KEYS[5] who · KEYS[6] tie (hash) · KEYS[7] out ·
--   KEYS[8] in (hash) · KEYS[9] mark · KEYS[10] seen · KEYS[11] heard · KEYS[12] undo · KEYS[13] posts · KEYS[14] name
-- ARGV[1] now, microseconds · ARGV[2] time of the erasure, ms · ARGV[3] lifetime, ms · ARGV[4] event id hash ·
--   ARGV[5] the person's hash · ARGV[6] number of the erasure's own outbox entry
-- Returns {number or 0, low, outbox entry}
-- The piece is 'S', its length (4 bytes) and: event id hash, person's hash, time stamp, then five lists, each a count
-- (4 bytes) and its entries: edges to take back (16), edges to put again (16), posts (8), targets (8), sources (8).
-- Costs some 30 commands.
if redis.call('ZCOUNT', KEYS[2], ARGV[6], ARGV[6]) == 0 then
  return { 0, outbox_low(KEYS[2]), '' }
end
local until_ms, ttl_ms = tonumber(ARGV[2]), ARGV[3]
local MARKER = string.rep('\0', 8) .. pack_stamp(until_ms, 16383)

local function get(key)
  return redis.call('GET', key) or ''
end

local function keep(key, text)
  if text == '' then
    redis.call('DEL', key)
  else
    redis.call('SET', key, text, 'PX', ttl_ms)
  end
end

local function number(n)
  local bytes = {}
  for i = 1, 4 do
    bytes[i] = n % 256
    n = math.floor(n / 256)
  end
  return string.char(unpack(bytes))
end

local function list(entries)
  return number(#entries) .. table.concat(entries)
end

local function newer_entries(text, spared)
  local kept = {}
  for at = 1, #text, 16 do
    if slot_ms(text, at) > until_ms or string.sub(text, at, at + 7) == spared then
      kept[#kept + 1] = string.sub(text, at, at + 15)
    end
  end
  return table.concat(kept)
end

local row, ids, who, undo = get(KEYS[3]), get(KEYS[4]), get(KEYS[5]), get(KEYS[12])
local kept_row, kept_ids, kept_who, taken, put = {}, {}, {}, {}, {}

-- An edge that only an erased word had taken back stands again.
local function restored(edge, id_hash)
  local word = find_slot(undo, id_hash, 16)
  if slot_code(edge, 1) < 32768 or not word or slot_ms(undo, word) > until_ms then
    return edge
  end
  edge = string.sub(edge, 1, 9) .. string.char(string.byte(edge, 10) - 128) .. string.sub(edge, 11)
  put[#put + 1] = edge
  return edge
end

for at = 1, #row, 16 do
  local edge, place = string.sub(row, at, at + 15), (at + 1) / 2
  local id_hash = string.sub(ids, place, place + 7)
  if slot_ms(edge, 1) > until_ms then
    kept_row[#kept_row + 1] = restored(edge, id_hash)
    kept_ids[#kept_ids + 1] = id_hash
    kept_who[#kept_who + 1] = string.sub(who, place, place + 7)
  elseif slot_code(edge, 1) < 16383 then
    taken[#taken + 1] = edge
  end
end
kept_row[#kept_row + 1], kept_ids[#kept_ids + 1], kept_who[#kept_who + 1] = MARKER, string.rep('\0', 8), string.rep('\0', 8)
keep(KEYS[3], table.concat(kept_row))
keep(KEYS[4], table.concat(kept_ids))
keep(KEYS[5], table.concat(kept_who))

-- Relations: the time stands in the first 8 bytes of each value.
local function drop_relations(hash_key)
  local dropped, flat = {}, redis.call('HGETALL', hash_key)
  for i = 1, #flat, 2 do
    if slot_ms('--------' .. flat[i + 1], 1) <= until_ms then
      dropped[#dropped + 1] = flat[i]
      redis.call('HDEL', hash_key, flat[i])
    end
  end
  return dropped
end

local targets, sources = drop_relations(KEYS[6]), drop_relations(KEYS[8])
for _, key in ipairs({ KEYS[7], KEYS[9] }) do
  local left = newer_entries(get(key))
  if left == '' then
    redis.call('DEL', key)
  else
    redis.call('SET', key, left)
  end
end

keep(KEYS[10], newer_entries(get(KEYS[10])))
keep(KEYS[11], newer_entries(get(KEYS[11]), ARGV[4]))
keep(KEYS[12], newer_entries(undo))

local posts, purged, left = get(KEYS[13]), {}, {}
for at = 1, #posts, 16 do
  if slot_ms(posts, at) <= until_ms then
    purged[#purged + 1] = string.sub(posts, at, at + 7)
  else
    left[#left + 1] = string.sub(posts, at, at + 15)
  end
end
keep(KEYS[13], table.concat(left))
if #kept_row == 1 and redis.call('EXISTS', KEYS[6], KEYS[8], KEYS[13]) == 0 then
  redis.call('DEL', KEYS[14])
end

local body = ARGV[4] .. ARGV[5] .. pack_stamp(until_ms, 0) .. list(taken) .. list(put) .. list(purged)
  .. list(targets) .. list(sources)
local piece = 'S' .. number(#body) .. body
local seq = put_outbox(KEYS[1], KEYS[2], ARGV[1], piece)
return { seq, outbox_low(KEYS[2]), string.format('%.0f', seq) .. piece }
