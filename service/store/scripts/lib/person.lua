-- Check who acts. Returns nil where the event may be taken, else the code of the refusal:
-- 2 the person was erased at or after the event's time, 3 another id has the same hash.
local function refuse_person(name_key, erased_key, person_id, event_ms, ttl_ms)
  local known = redis.call('GET', name_key)
  if known and known ~= person_id then
    return 3
  end
  local erased_ms = tonumber(redis.call('GET', erased_key))
  if erased_ms and event_ms <= erased_ms then
    return 2
  end
  if not known then
    redis.call('SET', name_key, person_id, 'PX', ttl_ms)
  elseif redis.call('PTTL', name_key) >= 0 then
    redis.call('PEXPIRE', name_key, ttl_ms)
  end
  return nil
end
