-- Give each new kind the next code; a code never changes.
-- KEYS[1] kinds hash
-- ARGV[1] most kinds · ARGV[2…] kinds
-- Returns how many were new
-- Costs 1 command and 1 or 2 a kind.
local count, new = redis.call('HLEN', KEYS[1]), 0
for i = 2, #ARGV do
  if count < tonumber(ARGV[1]) and redis.call('HSETNX', KEYS[1], ARGV[i], count) == 1 then
    count, new = count + 1, new + 1
  end
end
return new
