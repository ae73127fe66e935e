-- Whether a person's list of events that are no edges is full, those older than retention aside.
local function heard_full(heard, oldest_ms, most)
  return #heard >= 16 * most and #drop_older(heard, oldest_ms) >= 16 * most
end

-- Remember an event's id hash; entries older than retention leave first.
local function remember(heard_key, heard, id_hash, event_ms, oldest_ms, ttl_ms)
  heard = drop_older(heard, oldest_ms)
  redis.call('SET', heard_key, heard .. id_hash .. pack_stamp(event_ms, 0), 'PX', ttl_ms)
end
