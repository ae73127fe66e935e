-- use: slots
-- Close an outbox entry and forget its event, which was refused elsewhere, so that it may be sent again.
-- KEYS[1] outbox:{b} · KEYS[2] heard (packed list)
-- ARGV[1] number of the entry · ARGV[2] id hash of the event to forget
-- Returns 1, or 0 where the entry was closed before
-- Costs 3 commands.
local closed = redis.call('ZREMRANGEBYSCORE', KEYS[1], ARGV[1], ARGV[1])
if closed == 1 then
  local heard = redis.call('GET', KEYS[2]) or ''
  local at = find_slot(heard, ARGV[2], 16)
  if at then
    redis.call('SET', KEYS[2], string.sub(heard, 1, at - 1) .. string.sub(heard, at + 16), 'KEEPTTL')
  end
end
return closed
