-- use: once, post, sums
-- Add edges to the sums of the posts of a bucket, or take them away, once.
-- KEYS[1] applied:{b} hash · then for each post: post, wait (packed list of actors)
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] now, ms · ARGV[5] lifetime, ms ·
--   ARGV[6] half-lives, ms, with commas · ARGV[7] which of them have a board, with commas ·
--   then for each post: id ('' unknown), number of edges, and for each edge: '+' or '-', stamp (8 bytes), actor hash
-- Returns for each post {author hash (zeros: unknown; '' another id has this hash), mark for each board}
-- Costs 1 command and 2 a post, 3 where the author is not known yet.
local now_ms, ttl_ms, half_lives, boards = tonumber(ARGV[4]), tonumber(ARGV[5]), numbers(ARGV[6]), numbers(ARGV[7])
local fresh = once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3]))
local answers, at = {}, 8

local function apply(post, wait_key, first, last)
  for i = first, last, 3 do
    if ARGV[i] == '+' then
      add_edge(post, ARGV[i + 1], now_ms, half_lives)
      if post.author_hash == NOBODY then
        redis.call('APPEND', wait_key, ARGV[i + 2])
        redis.call('PEXPIRE', wait_key, ttl_ms)
      end
    else
      take_edge(post, ARGV[i + 1], half_lives)
    end
  end
end

for i = 2, #KEYS, 2 do
  local id, count = ARGV[at], tonumber(ARGV[at + 1])
  local post = read_post(redis.call('GET', KEYS[i]), #half_lives)
  if id ~= '' and post.id ~= '' and post.id ~= id then
    answers[#answers + 1] = { '' }
  else
    if fresh then
      post.id = post.id ~= '' and post.id or id
      apply(post, KEYS[i + 1], at + 2, at + 1 + 3 * count)
      write_post(KEYS[i], post, #half_lives, ttl_ms, now_ms)
    end
    local answer = board_marks(post, now_ms, half_lives, boards)
    table.insert(answer, 1, post.author_hash)
    answers[#answers + 1] = answer
  end
  at = at + 2 + 3 * count
end
return answers
