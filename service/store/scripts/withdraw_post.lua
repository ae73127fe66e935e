-- use: once, post
-- Withdraw a post for good, also one that has not come yet.
-- KEYS[1] applied:{b} hash · KEYS[2] post
-- ARGV[1] source bucket and effect · ARGV[2] number · ARGV[3] low · ARGV[4] lifetime, ms · ARGV[5] number of
--   half-lives · ARGV[6] post id · ARGV[7] now, ms
-- Returns 'ok', or 'hash' where another id has the post's hash
-- Costs 4 commands.
local post = read_post(redis.call('GET', KEYS[2]), tonumber(ARGV[5]))
if post.id ~= '' and post.id ~= ARGV[6] then
  return 'hash'
end
if once(KEYS[1], ARGV[1], tonumber(ARGV[2]), tonumber(ARGV[3])) and post.flags % RECORDED == 0 then
  post.id, post.flags = ARGV[6], post.flags + WITHDRAWN
  write_post(KEYS[2], post, tonumber(ARGV[5]), tonumber(ARGV[4]), tonumber(ARGV[7]))
end
return 'ok'
