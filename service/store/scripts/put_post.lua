-- use: once, later, post, sums
-- Write a post's record from one of its post events, once, and move its creation edge accordingly.
-- KEYS[1] applied:{b} hash · KEYS[2] post · KEYS[3] wait (packed list of actors)
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] now, ms · ARGV[5] lifetime, ms ·
--   ARGV[6] half-lives, ms (packed doubles) · ARGV[7] post id · ARGV[8] author id · ARGV[9] author hash ·
--   ARGV[10] event time, ms · ARGV[11] event id · ARGV[12] audience code · ARGV[13] form · ARGV[14] topics ·
--   ARGV[15] code of the creation edge's kind
-- Returns {'ok', creation stamp, actors that wait for the author, the post's value}, or {'author'} where another
-- person wrote the post, or {'hash'} where another id has its hash
-- Costs 5 commands.
local now_ms, ttl_ms, half_lives = tonumber(ARGV[4]), tonumber(ARGV[5]), doubles(ARGV[6])
local event_ms, code = tonumber(ARGV[10]), tonumber(ARGV[15])
local value = redis.call('GET', KEYS[2])
local post = read_post(value, #half_lives)
if post.id ~= '' and post.id ~= ARGV[7] then
  return { 'hash' }
end
if post.author_hash ~= NOBODY and post.author ~= ARGV[8] then
  return { 'author' }
end

local function creation_stamp()
  return struct.pack('<HHI4', post.creation, post.created % 65536, math.floor(post.created / 65536))
end

local function note_time()
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

if once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3])) then
  local known = math.floor(post.flags / RECORDED) % 2 == 1
  local before = known and creation_stamp()
  post.id, post.author, post.author_hash = ARGV[7], ARGV[8], ARGV[9]
  note_time()
  if not known or later(event_ms, ARGV[11], post.latest, post.event) then
    post.latest, post.event, post.audience = event_ms, ARGV[11], tonumber(ARGV[12])
    post.form, post.topics, post.creation = ARGV[13], ARGV[14], code
  end
  post.created = post.edits[1]
  post.flags = post.flags % RECORDED + RECORDED
  local stamp = creation_stamp()
  if stamp ~= before then
    if before then
      take_edge(post, before, half_lives)
    end
    add_edge(post, stamp, now_ms, half_lives)
  end
  value = write_post(KEYS[2], post, #half_lives, ttl_ms, now_ms)
end
return { 'ok', creation_stamp(), redis.call('GET', KEYS[3]) or '', value or '' }
