-- Read the hashes of posts' authors.
-- KEYS for each: post
-- ARGV[1] place of the hash in a post's value, from 0
-- Returns the hashes, 8 bytes each in one string, zeros where the author is not known
-- Costs 1 command a post.
local from, authors, NOBODY = tonumber(ARGV[1]), {}, string.rep('\0', 8)
for i, key in ipairs(KEYS) do
  local author = redis.call('GETRANGE', key, from, from + 7)
  authors[i] = #author == 8 and author or NOBODY
end
return table.concat(authors)
