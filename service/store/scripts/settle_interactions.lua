-- use: slots
-- Close an outbox entry of interactions: write down the posts' authors, undo and forget what was refused.
-- KEYS[1] outbox:{b} · then for each person: row, ids, who (packed lists)
-- ARGV[1] number of the entry · then for each person: number of events, and for each event: id hash,
--   author hash ('' unknown, '-' the post refused the edge)
-- Returns 1, or 0 where the entry was closed before
-- Costs 1 command, 1 a person and up to 3 an event.
if redis.call('ZREMRANGEBYSCORE', KEYS[1], ARGV[1], ARGV[1]) == 0 then
  return 0
end
local at = 2
for i = 2, #KEYS, 3 do
  local ids = redis.call('GET', KEYS[i + 1]) or ''
  local last = at + 2 * tonumber(ARGV[at])
  for j = at + 1, last, 2 do
    local place, author = find_slot(ids, ARGV[j], 8), ARGV[j + 1]
    if place and author == '-' then
      local high = redis.call('GETRANGE', KEYS[i], 2 * place + 7, 2 * place + 7)
      redis.call('SETRANGE', KEYS[i], 2 * place + 7, string.char(string.byte(high) % 128 + 128))
      redis.call('SETRANGE', KEYS[i + 1], place - 1, string.rep('\0', 8))
    elseif place and author ~= '' then
      redis.call('SETRANGE', KEYS[i + 2], place - 1, author)
    end
  end
  at = last + 1
end
return 1
