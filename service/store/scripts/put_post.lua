-- use: once, later, post, sums
-- Write a post's record from one of its post events, once, and move its creation edge accordingly.
-- KEYS[1] applied:{b} hash · KEYS[2] post · KEYS[3] wait (packed list of actors)
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] now, ms · ARGV[5] lifetime, ms ·
--   ARGV[6] half-lives, ms · ARGV[7] which of them have a board · ARGV[8] post id · ARGV[9] author id ·
--   ARGV[10] author hash · ARGV[11] event time, ms · ARGV[12] event id · ARGV[13] audience code · ARGV[14] form ·
--   ARGV[15] topics · ARGV[16] code of the creation edge's kind
-- Returns {'ok', creation stamp, actors that wait for the author, mark for each board}, or {'author'} where another
-- person wrote the post, or {'hash'} where another id has its hash
-- Costs 5 commands.
local now_ms, ttl_ms, half_lives, boards = tonumber(ARGV[4]), tonumber(ARGV[5]), numbers(ARGV[6]), numbers(ARGV[7])
local event_ms, code = tonumber(ARGV[11]), tonumber(ARGV[16])
local post = read_post(redis.call('GET', KEYS[2]), #half_lives)
if post.id ~= '' and post.id ~= ARGV[8] then
  return { 'hash' }
end
if post.author_hash ~= NOBODY and post.author ~= ARGV[9] then
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
  post.id, post.author, post.author_hash = ARGV[8], ARGV[9], ARGV[10]
  note_time()
  if not known or later(event_ms, ARGV[12], post.latest, post.event) then
    post.latest, post.event, post.audience = event_ms, ARGV[12], tonumber(ARGV[13])
    post.form, post.topics, post.creation = ARGV[14], ARGV[15], code
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
  write_post(KEYS[2], post, #half_lives, ttl_ms, now_ms)
end
local answer = { 'ok', creation_stamp(), redis.call('GET', KEYS[3]) or '' }
for _, mark in ipairs(board_marks(post, now_ms, half_lives, boards)) do
  answer[#answer + 1] = mark
end
return answer
