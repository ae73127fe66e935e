-- Raise many posts on a board, never lower them, and keep it to its greatest posts.
-- KEYS[1] board sorted set · KEYS[2] floor string
-- ARGV[1] most posts · ARGV[2] the greatest mark that was left out beforehand, '' none ·
--   then for each post: mark, hash
-- Returns how many left
-- Costs 1 command for 1,000 posts and up to 5 more.
for first = 3, #ARGV, 2000 do
  redis.call('ZADD', KEYS[1], 'GT', unpack(ARGV, first, math.min(first + 1999, #ARGV)))
end
local left_out = tonumber(ARGV[2])
local over = redis.call('ZCARD', KEYS[1]) - tonumber(ARGV[1])
if over > 0 then
  local last = tonumber(redis.call('ZRANGE', KEYS[1], over - 1, over - 1, 'WITHSCORES')[2])
  left_out = math.max(left_out or last, last)
  redis.call('ZREMRANGEBYRANK', KEYS[1], 0, over - 1)
end
local floor = tonumber(redis.call('GET', KEYS[2]))
if left_out and (not floor or left_out > floor) then
  redis.call('SET', KEYS[2], string.format('%.17g', left_out))
end
return math.max(over, 0)
