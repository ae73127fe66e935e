-- Lazily decayed running sums (forward decay; Cormode, Shkapenyuk, Srivastava and Xu, ICDE 2009).
local function kind_slot(post, code)
  for i, kind in ipairs(post.kinds) do
    if kind[CODE] == code then
      return i
    end
  end
  local kind = { code, 0, 0, 0 }
  post.kinds[#post.kinds + 1] = kind
  return #post.kinds
end

-- Add `sign` times one edge to the running sums of its kind.
local function fold_edge(post, stamp, sign, half_lives)
  local ms, slot = stamp_ms(stamp, 1), kind_slot(post, stamp_code(stamp))
  local kind = post.kinds[slot]
  local as_of = kind[COUNT] ~= 0 and kind[AS_OF] or ms
  kind[COUNT] = kind[COUNT] + sign
  if kind[COUNT] == 0 then
    table.remove(post.kinds, slot)
    return
  end
  local grown, lag = math.max(ms - as_of, 0), math.max(as_of - ms, 0)
  for j, half_life in ipairs(half_lives) do
    local sum = kind[BEFORE_SUMS + j] or 0
    kind[BEFORE_SUMS + j] = sum * 2 ^ (-grown / half_life) + sign * 2 ^ (-lag / half_life)
  end
  kind[AS_OF] = math.max(as_of, ms)
end

-- Edges stay in order of time; the newest RAW_EDGES and those ahead of the clock are kept as they are. Past
-- MOST_RAW_EDGES the clock is no longer waited for: until it has come, such an edge counts for a little more than 1.
local function add_edge(post, stamp, now_ms, half_lives)
  local ms, edges = stamp_ms(stamp, 1), post.edges
  local before = #edges
  while before > 0 and stamp_ms(edges, before - 7) > ms do
    before = before - 8
  end
  edges = string.sub(edges, 1, before) .. stamp .. string.sub(edges, before + 1)
  while #edges > 8 * RAW_EDGES and (stamp_ms(edges, 1) <= now_ms or #edges > 8 * MOST_RAW_EDGES) do
    fold_edge(post, string.sub(edges, 1, 8), 1, half_lives)
    edges = string.sub(edges, 9)
  end
  post.edges = edges
end

local function take_edge(post, stamp, half_lives)
  local edges = post.edges
  for at = #edges - 7, 1, -8 do
    if string.sub(edges, at, at + 7) == stamp then
      post.edges = string.sub(edges, 1, at - 1) .. string.sub(edges, at + 8)
      return
    end
  end
  fold_edge(post, stamp, -1, half_lives)
end

-- Read packed doubles.
local function doubles(packed)
  local list = { struct.unpack('<' .. string.rep('d', #packed / 8), packed) }
  list[#list] = nil
  return list
end
