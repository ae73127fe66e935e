-- use: once, post, sums
-- Add edges to the sums of the posts of a bucket, or take them away, once for each outbox entry.
-- KEYS[1] applied:{b} hash · then for each post: post, wait (packed list of actors)
-- ARGV[1] now, ms · ARGV[2] lifetime, ms · ARGV[3] half-lives, ms (packed doubles) · ARGV[4] number of entries ·
--   then for each entry: source bucket and effect, number, low, number of posts,
--   and for each post: id ('' unknown), edges (17 bytes each: '+' or '-', stamp, actor hash)
-- Returns for each post {author hash (zeros: unknown; '' another id has this hash), the post's value}
-- Costs 2 commands an entry and 2 a post, 3 where the author is not known yet.
local now_ms, ttl_ms, half_lives = tonumber(ARGV[1]), tonumber(ARGV[2]), doubles(ARGV[3])
local answers, post_at = {}, 2

local function apply(post, wait_key, changes)
  local early = {}
  for i = 1, #changes, 17 do
    local stamp = string.sub(changes, i + 1, i + 8)
    if string.byte(changes, i) == 43 then
      add_edge(post, stamp, now_ms, half_lives)
      early[#early + 1] = string.sub(changes, i + 9, i + 16)
    else
      take_edge(post, stamp, half_lives)
    end
  end
  if post.author_hash == NOBODY and #early > 0 then
    redis.call('APPEND', wait_key, table.concat(early))
    redis.call('PEXPIRE', wait_key, ARGV[2])
  end
end

local function answer(post_key, wait_key, id, changes, fresh)
  local value = redis.call('GET', post_key)
  local post = read_post(value, #half_lives)
  if id ~= '' and post.id ~= '' and post.id ~= id then
    return { '' }
  end
  if fresh then
    post.id = post.id ~= '' and post.id or id
    apply(post, wait_key, changes)
    value = write_post(post_key, post, #half_lives, ttl_ms, now_ms)
  end
  return { post.author_hash, value or '' }
end

local at = 5 + 4 * tonumber(ARGV[4])
for i = 5, at - 1, 4 do
  local fresh = once(KEYS[1], ARGV[i], tonumber(ARGV[i + 1]), tonumber(ARGV[i + 2]))
  for _ = 1, tonumber(ARGV[i + 3]) do
    answers[#answers + 1] = answer(KEYS[post_at], KEYS[post_at + 1], ARGV[at], ARGV[at + 1], fresh)
    post_at, at = post_at + 2, at + 2
  end
end
return answers
