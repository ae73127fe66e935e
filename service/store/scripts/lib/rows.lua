-- Add to the end of a list and prolong its life. APPEND leaves as much room again as the list is long, so a short list
-- is written anew instead, which takes just what it needs.
local REWRITTEN_BYTES = 32768

local function append(key, added, ttl_ms)
  if redis.call('STRLEN', key) + #added <= REWRITTEN_BYTES then
    redis.call('SET', key, (redis.call('GET', key) or '') .. added, 'PX', ttl_ms)
  else
    redis.call('APPEND', key, added)
    redis.call('PEXPIRE', key, ttl_ms)
  end
end

-- Drop a row's leading edges older than `oldest_ms`, and what stands beside them; the lists keep their lifetime.
local function trim_row(row_key, ids_key, who_key, oldest_ms)
  local head = redis.call('GETRANGE', row_key, 0, 15)
  if #head < 16 or slot_ms(head, 1) >= oldest_ms then
    return
  end
  local row, cut = drop_older(redis.call('GET', row_key), oldest_ms)
  redis.call('SET', row_key, row, 'KEEPTTL')
  redis.call('SET', ids_key, string.sub(redis.call('GET', ids_key), cut / 2 + 1), 'KEEPTTL')
  redis.call('SET', who_key, string.sub(redis.call('GET', who_key), cut / 2 + 1), 'KEEPTTL')
end
