-- use: slots
-- Fill in whose post it was that a person had interacted with before the post came.
-- KEYS[1] row · KEYS[2] who (packed lists)
-- ARGV[1] post hash · ARGV[2] author hash
-- Returns how many edges learned their author
-- Costs 2 commands and 1 an edge.
local row, who = redis.call('GET', KEYS[1]) or '', redis.call('GET', KEYS[2]) or ''
local NOBODY, learned = string.rep('\0', 8), 0
local at = find_slot(row, ARGV[1], 16)
while at do
  local place = (at + 1) / 2
  if string.sub(who, place, place + 7) == NOBODY then
    redis.call('SETRANGE', KEYS[2], place - 1, ARGV[2])
    learned = learned + 1
  end
  local further = find_slot(string.sub(row, at + 16), ARGV[1], 16)
  at = further and at + 15 + further
end
return learned
