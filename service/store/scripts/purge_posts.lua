-- use: once, post, sums
-- Take an erased person's post events, up to a time, out of their posts, once.
-- KEYS[1] applied:{b} hash · KEYS[2…] post
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] lifetime, ms ·
--   ARGV[5] half-lives, ms (packed doubles) ·
--   ARGV[6] time of the erasure, ms · ARGV[7] the person's hash · ARGV[8] now, ms
-- Returns for each post the stamp of the creation edge that remains, '' where none does
-- Costs 1 command and 2 a post.
local half_lives, until_ms = doubles(ARGV[5]), tonumber(ARGV[6])
local fresh = once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3]))

local function creation_stamp(post)
  return struct.pack('<HHI4', post.creation, post.created % 65536, math.floor(post.created / 65536))
end

local function forget(post)
  post.flags, post.audience, post.form, post.author, post.event = post.flags % RECORDED, 0, '', '', ''
  post.topics, post.creation, post.created, post.latest, post.author_hash = '', 0, 0, 0, NOBODY
end

local function purge(key, post)
  local kept, before = {}, creation_stamp(post)
  for _, edit_ms in ipairs(post.edits) do
    if edit_ms > until_ms then
      kept[#kept + 1] = edit_ms
    end
  end
  if #kept == #post.edits then
    return
  end
  post.edits = kept
  take_edge(post, before, half_lives)
  if kept[1] then
    post.created = kept[1]
    add_edge(post, creation_stamp(post), kept[1], half_lives)
  else
    forget(post)
  end
  if post.flags == 0 and #post.edges == 0 and #post.kinds == 0 then
    redis.call('DEL', key)
  else
    write_post(key, post, #half_lives, tonumber(ARGV[4]), tonumber(ARGV[8]))
  end
end

local answers = {}
for i = 2, #KEYS do
  local value = redis.call('GET', KEYS[i])
  local post = read_post(value, #half_lives)
  local theirs = value and post.author_hash == ARGV[7]
  if theirs and fresh then
    purge(KEYS[i], post)
  end
  answers[#answers + 1] = theirs and #post.edits > 0 and creation_stamp(post) or ''
end
return answers
