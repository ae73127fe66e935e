-- Keep a board to its greatest posts, and remember the greatest mark that left.
-- KEYS[1] board sorted set · KEYS[2] floor string
-- ARGV[1] most posts
-- Returns how many left
-- Costs 1 command, 4 where posts leave.
local over = redis.call('ZCARD', KEYS[1]) - tonumber(ARGV[1])
if over <= 0 then
  return 0
end
local last = redis.call('ZRANGE', KEYS[1], over - 1, over - 1, 'WITHSCORES')
local floor = tonumber(redis.call('GET', KEYS[2]))
if not floor or tonumber(last[2]) > floor then
  redis.call('SET', KEYS[2], last[2])
end
return redis.call('ZREMRANGEBYRANK', KEYS[1], 0, over - 1)
