-- use: once, later, post, sums
-- Write posts' records, each from one of its post events, once, and move their creation edges accordingly.
-- KEYS[1] applied:{b} hash · then for each post: post, wait (packed list of actors)
-- ARGV[1] now, ms · ARGV[2] lifetime, ms · ARGV[3] half-lives, ms (packed doubles) · then for each post:
--   source bucket and effect, number, low, post id, author id, author hash, event time in ms, event id, audience code,
--   form, topics, code of the creation edge's kind
-- Returns for each post {'ok', creation stamp, actors that wait for the author, the post's value}, or {'author'} where
-- another person wrote the post, or {'hash'} where another id has its hash
-- Costs 5 commands a post.
local now_ms, ttl_ms, half_lives = tonumber(ARGV[1]), tonumber(ARGV[2]), doubles(ARGV[3])

local function creation_stamp(post)
  return struct.pack('<HHI4', post.creation, post.created % 65536, math.floor(post.created / 65536))
end

local function note_time(post, event_ms)
  for _, edit_ms in ipairs(post.edits) do
    if edit_ms == event_ms then
      return
    end
  end
  post.edits[#post.edits + 1] = event_ms
  table.sort(post.edits)
  -- The first stands for the creation, the newest for what an erasure may leave.
  if #post.edits > MOST_POST_EVENTS then
    table.remove(post.edits, 2)
  end
end

local function write(key, post, at)
  local event_ms, event = tonumber(ARGV[at + 6]), ARGV[at + 7]
  local known = math.floor(post.flags / RECORDED) % 2 == 1
  local before = known and creation_stamp(post)
  post.id, post.author, post.author_hash = ARGV[at + 3], ARGV[at + 4], ARGV[at + 5]
  note_time(post, event_ms)
  if not known or later(event_ms, event, post.latest, post.event) then
    post.latest, post.event, post.audience = event_ms, event, tonumber(ARGV[at + 8])
    post.form, post.topics, post.creation = ARGV[at + 9], ARGV[at + 10], tonumber(ARGV[at + 11])
  end
  post.created = post.edits[1]
  post.flags = post.flags % RECORDED + RECORDED
  local stamp = creation_stamp(post)
  if stamp ~= before then
    if before then
      take_edge(post, before, half_lives)
    end
    add_edge(post, stamp, now_ms, half_lives)
  end
  return write_post(key, post, #half_lives, ttl_ms, now_ms)
end

local function put(post_key, wait_key, at)
  local value = redis.call('GET', post_key)
  local post = read_post(value, #half_lives)
  if post.id ~= '' and post.id ~= ARGV[at + 3] then
    return { 'hash' }
  end
  if post.author_hash ~= NOBODY and post.author ~= ARGV[at + 4] then
    return { 'author' }
  end
  if once(KEYS[1], ARGV[at], tonumber(ARGV[at + 1]), tonumber(ARGV[at + 2])) then
    value = write(post_key, post, at)
  end
  return { 'ok', creation_stamp(post), redis.call('GET', wait_key) or '', value or '' }
end

local answers, at = {}, 4
for i = 2, #KEYS, 2 do
  answers[#answers + 1] = put(KEYS[i], KEYS[i + 1], at)
  at = at + 12
end
return answers
