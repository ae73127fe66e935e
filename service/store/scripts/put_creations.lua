-- use: slots, rows
-- Write or move posts' creation edges in the rows of their authors, while their outbox entries are outstanding.
-- KEYS[1] outbox:{b} · then for each edge: row, ids, who, posts (packed lists)
-- ARGV[1] oldest time kept, ms · ARGV[2] lifetime, ms ·
--   then for each edge: number of the outbox entry, post hash, creation stamp, author hash
-- Returns for each edge 1 where it stands, 0 where there was nothing to do
-- Costs 5 to 14 commands an edge.
local oldest_ms, ttl_ms = tonumber(ARGV[1]), ARGV[2]
local lifetime = tonumber(ttl_ms)

-- The list of posts lasts longer than their edges: a post that others still comment on must be found by an erasure.
local function note_post(key, edge, post)
  local posts = drop_older(redis.call('GET', key) or '', oldest_ms - 12 * lifetime)
  local known = find_slot(posts, post, 16)
  if known then
    posts = string.sub(posts, 1, known - 1) .. edge .. string.sub(posts, known + 16)
  else
    posts = posts .. edge
  end
  redis.call('SET', key, posts, 'PX', string.format('%.0f', 13 * lifetime))
end

local function creation_place(row, post)
  local at = find_slot(row, post, 16)
  while at and math.floor(slot_code(row, at) / 16384) % 2 == 0 do
    local further = find_slot(string.sub(row, at + 16), post, 16)
    at = further and at + 15 + further
  end
  return at
end

local function put(number, post, stamp, author, row_key, ids_key, who_key, posts_key)
  if redis.call('ZCOUNT', KEYS[1], number, number) == 0 then
    return 0
  end
  local edge = post .. stamp
  note_post(posts_key, edge, post)
  local at = creation_place(redis.call('GET', row_key) or '', post)
  if at then
    redis.call('SETRANGE', row_key, at - 1, edge)
  elseif slot_ms(edge, 1) < oldest_ms then
    return 0
  else
    append(row_key, edge, ttl_ms)
    append(ids_key, string.rep('\0', 8), ttl_ms)
    append(who_key, author, ttl_ms)
    return 1
  end
  redis.call('PEXPIRE', row_key, ttl_ms)
  redis.call('PEXPIRE', ids_key, ttl_ms)
  redis.call('PEXPIRE', who_key, ttl_ms)
  return 1
end

local answers, at = {}, 3
for i = 2, #KEYS, 4 do
  answers[#answers + 1] =
    put(ARGV[at], ARGV[at + 1], ARGV[at + 2], ARGV[at + 3], KEYS[i], KEYS[i + 1], KEYS[i + 2], KEYS[i + 3])
  at = at + 4
end
return answers
