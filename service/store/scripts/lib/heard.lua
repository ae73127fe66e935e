-- Remember an event's id hash; entries older than retention leave first.
local function remember(heard_key, heard, id_hash, event_ms, oldest_ms, ttl_ms)
  heard = drop_older(heard, oldest_ms)
  redis.call('SET', heard_key, heard .. id_hash .. pack_stamp(event_ms, 0), 'PX', ttl_ms)
end
