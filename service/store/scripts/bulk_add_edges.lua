-- use: once_all, post, post_edges, sums
-- Add whole runs of edges to the sums of the posts of a bucket, those of many outbox entries together, once.
-- KEYS[1] applied:{b} hash · then for each post: post, wait (packed list of actors)
-- ARGV[1] source bucket and effect, number and low of each entry, with commas · ARGV[2] now, ms ·
--   ARGV[3] lifetime, ms · ARGV[4] half-lives, ms (packed doubles) ·
--   ARGV[5] stamps of edges that may stay as they are, post by post and in order of time (8 bytes each) ·
--   ARGV[6] running sums of the edges that are older, post by post (kinds as in lib/post.lua) · ARGV[7] actors of all
--   edges, post by post (8 bytes each) · ARGV[8] for each post the numbers of stamps, of kinds and of edges (4 bytes
--   each) · then for each post: id
-- Returns {} with nothing done where some entry was applied here before, or
-- {hashes of the posts' authors (8 bytes each, zeros unknown), for each post the numbers of its stamps and of its kinds
-- now (2 bytes each), all stamps, all kinds, places of posts, from 1, where another id has this hash}
-- Costs 2 commands and 2 a post, 4 where the author is not known yet.
local now_ms, ttl_ms, half_lives = tonumber(ARGV[2]), tonumber(ARGV[3]), doubles(ARGV[4])
local stamps, sums, actors, numbers = ARGV[5], ARGV[6], ARGV[7], ARGV[8]
local layout = kind_layout(#half_lives)
local KIND_SIZE = struct.size(layout)

local authors, counts, all_edges, all_sums, refused = {}, {}, {}, {}, {}

local function sources()
  local list = {}
  for word in string.gmatch(ARGV[1], '[^,]+') do
    list[#list + 1] = word
  end
  return list
end

local function add_kind(kinds, added)
  local slot = kind_slot(kinds, added[CODE])
  local kind = kinds.kinds[slot]
  local as_of = kind[COUNT] ~= 0 and math.max(kind[AS_OF], added[AS_OF]) or added[AS_OF]
  local count = kind[COUNT] + added[COUNT]
  if count == 0 then
    table.remove(kinds.kinds, slot)
    return
  end
  local before = kind[COUNT] ~= 0 and kind[AS_OF] or as_of
  local behind, lag = before - as_of, added[AS_OF] - as_of
  for j, half_life in ipairs(half_lives) do
    local sum, more = kind[BEFORE_SUMS + j] or 0, added[BEFORE_SUMS + j]
    kind[BEFORE_SUMS + j] = (behind == 0 and sum or sum * 2 ^ (behind / half_life))
      + (lag == 0 and more or more * 2 ^ (lag / half_life))
  end
  kind[COUNT], kind[AS_OF] = count, as_of
end

local function read_kinds(packed)
  local kinds = {}
  for at = 1, #packed, KIND_SIZE do
    kinds[#kinds + 1] = { struct.unpack(layout, packed, at) }
    table.remove(kinds[#kinds])
  end
  return { kinds = kinds }
end

local function pack_kinds(kinds)
  local parts = {}
  for i, kind in ipairs(kinds.kinds) do
    parts[i] = struct.pack(layout, unpack(kind))
  end
  return table.concat(parts)
end

-- Fold the first edges of a list that is in order of time, up to `last`: those of one kind go in together.
local function fold_run(kinds, edges, last)
  local by_code, order = {}, {}
  for at = 1, last, 8 do
    local low, high = string.byte(edges, at, at + 1)
    local code = low + high * 256
    local times = by_code[code]
    if not times then
      times = {}
      by_code[code], order[#order + 1] = times, code
    end
    times[#times + 1] = stamp_ms(edges, at)
  end
  for _, code in ipairs(order) do
    local times = by_code[code]
    local as_of = times[#times]
    local added = { code, 0, #times, as_of }
    for j, half_life in ipairs(half_lives) do
      local sum = 1
      for i = 1, #times - 1 do
        sum = sum + 2 ^ ((times[i] - as_of) / half_life)
      end
      added[BEFORE_SUMS + j] = sum
    end
    add_kind(kinds, added)
  end
end

-- Put a run that is in order of time among the edges there are, later arrivals after earlier ones of the same time.
local function merged(edges, run)
  if edges == '' or stamp_ms(edges, #edges - 7) <= stamp_ms(run, 1) then
    return edges .. run
  end
  local parts, at, at_ms = {}, 1, stamp_ms(edges, 1)
  for i = 1, #run, 8 do
    local ms = stamp_ms(run, i)
    while at_ms and at_ms <= ms do
      parts[#parts + 1] = string.sub(edges, at, at + 7)
      at = at + 8
      at_ms = at < #edges and stamp_ms(edges, at)
    end
    parts[#parts + 1] = string.sub(run, i, i + 7)
  end
  parts[#parts + 1] = string.sub(edges, at)
  return table.concat(parts)
end

-- Add a post's run: `packed` holds the sums of those edges that are certainly older than all that stay.
local function add_run(post, run, packed)
  local edges, last = merged(post.edges, run), 0
  while #edges - last > 8 * RAW_EDGES
    and (#edges - last > 8 * MOST_RAW_EDGES or stamp_ms(edges, last + 1) <= now_ms) do
    last = last + 8
  end
  post.edges = string.sub(edges, last + 1)
  if last > 0 or packed ~= '' then
    local kinds = read_kinds(post.sums)
    for at = 1, #packed, KIND_SIZE do
      add_kind(kinds, { struct.unpack(layout, packed, at) })
    end
    fold_run(kinds, edges, last)
    post.sums = pack_kinds(kinds)
  end
end

if not once_all(KEYS[1], sources()) then
  return {}
end
-- Open a post for this id. Of one with no id only a withdrawal by hash can be known: lib/post.lua writes the id there.
local function opened(key, id)
  local value = redis.call('GET', key)
  local post = open_post(value, id)
  if post.id ~= '' then
    return post, value
  end
  local whole = read_post(value, #half_lives)
  whole.id = id
  value = write_post(key, whole, #half_lives, ttl_ms, now_ms)
  return open_post(value, id), value
end

-- Note who made edges before the author was known.
local function note_early(key, early, value)
  if value or not redis.call('SET', key, early, 'NX', 'PX', ARGV[3]) then
    redis.call('APPEND', key, early)
    redis.call('PEXPIRE', key, ARGV[3])
  end
end

local stamp_at, kind_at, actor_at = 1, 1, 1
for place = 1, (#KEYS - 1) / 2 do
  local id, key = ARGV[8 + place], KEYS[2 * place]
  local stamp_n, kind_n, actor_n = struct.unpack('<I4I4I4', numbers, 12 * place - 11)
  local stamp_last, kind_last = stamp_at + 8 * stamp_n - 1, kind_at + KIND_SIZE * kind_n - 1
  local actor_last = actor_at + 8 * actor_n - 1
  local post, value = opened(key, id)
  if post.id ~= id then
    refused[#refused + 1] = place
    counts[place] = '\0\0\0\0'
  else
    add_run(post, string.sub(stamps, stamp_at, stamp_last), string.sub(sums, kind_at, kind_last))
    if post.author_hash == NOBODY then
      note_early(KEYS[2 * place + 1], string.sub(actors, actor_at, actor_last), value)
    end
    counts[place] = close_post(key, post, KIND_SIZE, ttl_ms, now_ms)
    all_edges[#all_edges + 1], all_sums[#all_sums + 1] = post.edges, post.sums
  end
  authors[place] = post.author_hash
  stamp_at, kind_at, actor_at = stamp_last + 1, kind_last + 1, actor_last + 1
end
return { table.concat(authors), table.concat(counts), table.concat(all_edges), table.concat(all_sums), refused }
