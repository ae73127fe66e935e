-- Note in the change log whose rows and which posts have changed, under the next number without a gap.
-- KEYS[1] changes:{log} stream · KEYS[2] changed:{log} integer
-- ARGV[1] most entries kept · ARGV[2] hashes of people, 8 bytes each · ARGV[3] hashes of posts, 8 bytes each
-- Returns the number
-- Costs 2 commands.
local number = redis.call('INCR', KEYS[2])
redis.call('XADD', KEYS[1], 'MAXLEN', '~', ARGV[1], number .. '-0', 'people', ARGV[2], 'posts', ARGV[3])
return number
