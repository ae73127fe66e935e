-- Whether (ms, id) comes after (other_ms, other_id): the later time, on equal times the greater id by bytes.
-- Lua's own comparison of strings follows the server's locale, so the bytes are compared here.
local function later(ms, id, other_ms, other_id)
  if ms ~= other_ms then
    return ms > other_ms
  end
  for i = 1, math.min(#id, #other_id) do
    local a, b = string.byte(id, i), string.byte(other_id, i)
    if a ~= b then
      return a > b
    end
  end
  return #id > #other_id
end
