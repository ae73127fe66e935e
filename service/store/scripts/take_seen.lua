-- use: slots, person, heard
-- Note which posts a reader has seen; the newest of them are kept, in order of time.
-- KEYS[1] name · KEYS[2] erased · KEYS[3] ids · KEYS[4] heard · KEYS[5] seen (packed lists but for the first two)
-- ARGV[1] oldest time kept, ms · ARGV[2] lifetime, ms · ARGV[3] person id · ARGV[4] event id hash ·
--   ARGV[5] event time, ms · ARGV[6] most posts kept · ARGV[7] most events that are no edges · ARGV[8…] post hashes
-- Returns the outcome, as in take_interactions.lua
-- Costs 8 commands.
local oldest_ms, event_ms, ttl_ms = tonumber(ARGV[1]), tonumber(ARGV[5]), ARGV[2]
local heard = redis.call('GET', KEYS[4]) or ''
if find_slot(heard, ARGV[4], 16) or find_slot(redis.call('GET', KEYS[3]) or '', ARGV[4], 8) then
  return 1
end
local refusal = refuse_person(KEYS[1], KEYS[2], ARGV[3], event_ms, ttl_ms)
if refusal then
  return refusal
end
if heard_full(heard, oldest_ms, tonumber(ARGV[7])) then
  return 4
end
remember(KEYS[4], heard, ARGV[4], event_ms, oldest_ms, ttl_ms)

local seen = drop_older(redis.call('GET', KEYS[5]) or '', oldest_ms)

-- Entries stand in order of (time, hash), so that which ones leave does not depend on the order of arrival.
local function before(at, post)
  local ms = slot_ms(seen, at)
  if ms ~= event_ms then
    return ms < event_ms
  end
  for i = 1, 8 do
    local a, b = string.byte(seen, at + i - 1), string.byte(post, i)
    if a ~= b then
      return a < b
    end
  end
  return true
end

local function note(post)
  local known = find_slot(seen, post, 16)
  if known then
    if slot_ms(seen, known) >= event_ms then
      return
    end
    seen = string.sub(seen, 1, known - 1) .. string.sub(seen, known + 16)
  end
  local at = #seen + 1
  while at > 1 and not before(at - 16, post) do
    at = at - 16
  end
  seen = string.sub(seen, 1, at - 1) .. post .. pack_stamp(event_ms, 0) .. string.sub(seen, at)
end

for i = 8, #ARGV do
  note(ARGV[i])
end
local over = #seen - 16 * tonumber(ARGV[6])
if over > 0 then
  seen = string.sub(seen, over + 1)
end
redis.call('SET', KEYS[5], seen, 'PX', ttl_ms)
return 0
