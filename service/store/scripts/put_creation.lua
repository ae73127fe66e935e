-- use: slots, rows
-- Write or move a post's creation edge in its author's row, while its outbox entry is outstanding.
-- KEYS[1] outbox:{b} · KEYS[2] row · KEYS[3] ids · KEYS[4] who · KEYS[5] posts (packed lists)
-- ARGV[1] number of the outbox entry · ARGV[2] post hash · ARGV[3] creation stamp · ARGV[4] author hash ·
--   ARGV[5] oldest time kept, ms · ARGV[6] lifetime, ms
-- Returns 1 where the edge stands, 0 where there was nothing to do
-- Costs 5 to 14 commands.
if redis.call('ZCOUNT', KEYS[1], ARGV[1], ARGV[1]) == 0 then
  return 0
end
local edge, ttl_ms = ARGV[2] .. ARGV[3], ARGV[6]

-- The list of posts lasts longer than their edges: a post that others still comment on must be found by an erasure.
local function note_post()
  local lifetime = tonumber(ttl_ms)
  local posts = drop_older(redis.call('GET', KEYS[5]) or '', tonumber(ARGV[5]) - 12 * lifetime)
  local known = find_slot(posts, ARGV[2], 16)
  if known then
    posts = string.sub(posts, 1, known - 1) .. edge .. string.sub(posts, known + 16)
  else
    posts = posts .. edge
  end
  redis.call('SET', KEYS[5], posts, 'PX', string.format('%.0f', 13 * lifetime))
end

local function creation_place(row)
  local at = find_slot(row, ARGV[2], 16)
  while at and math.floor(slot_code(row, at) / 16384) % 2 == 0 do
    local further = find_slot(string.sub(row, at + 16), ARGV[2], 16)
    at = further and at + 15 + further
  end
  return at
end

note_post()
local at = creation_place(redis.call('GET', KEYS[2]) or '')
if at then
  redis.call('SETRANGE', KEYS[2], at - 1, edge)
elseif slot_ms(edge, 1) < tonumber(ARGV[5]) then
  return 0
else
  append(KEYS[2], edge, ttl_ms)
  append(KEYS[3], string.rep('\0', 8), ttl_ms)
  append(KEYS[4], ARGV[4], ttl_ms)
  return 1
end
redis.call('PEXPIRE', KEYS[2], ttl_ms)
redis.call('PEXPIRE', KEYS[3], ttl_ms)
redis.call('PEXPIRE', KEYS[4], ttl_ms)
return 1
