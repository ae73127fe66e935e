-- Lazily decayed running sums (forward decay; Cormode, Shkapenyuk, Srivastava and Xu, ICDE 2009).
local function kind_slot(post, code)
  for i, kind in ipairs(post.kinds) do
    if kind.code == code then
      return i
    end
  end
  return nil
end

-- Add `sign` times one edge to the running sums of its kind.
local function fold_edge(post, stamp, sign, half_lives)
  local code, ms = stamp_code(stamp), stamp_ms(stamp)
  local slot = kind_slot(post, code)
  if not slot then
    slot = #post.kinds + 1
    post.kinds[slot] = { code = code, count = 0, as_of = ms, sums = {} }
    for j = 1, #half_lives do
      post.kinds[slot].sums[j] = 0
    end
  end
  local kind = post.kinds[slot]
  kind.count = kind.count + sign
  if kind.count == 0 then
    table.remove(post.kinds, slot)
    return
  end
  local grown, lag = math.max(ms - kind.as_of, 0), math.max(kind.as_of - ms, 0)
  for j, half_life in ipairs(half_lives) do
    kind.sums[j] = kind.sums[j] * 2 ^ (-grown / half_life) + sign * 2 ^ (-lag / half_life)
  end
  kind.as_of = math.max(kind.as_of, ms)
end

-- Edges stay in order of time; the newest RAW_EDGES and those ahead of the clock are kept as they are.
local function add_edge(post, stamp, now_ms, half_lives)
  local ms, at = stamp_ms(stamp), #post.edges + 1
  while at > 1 and stamp_ms(post.edges[at - 1]) > ms do
    at = at - 1
  end
  table.insert(post.edges, at, stamp)
  while #post.edges > RAW_EDGES and stamp_ms(post.edges[1]) <= now_ms do
    fold_edge(post, table.remove(post.edges, 1), 1, half_lives)
  end
end

local function take_edge(post, stamp, half_lives)
  for i = #post.edges, 1, -1 do
    if post.edges[i] == stamp then
      table.remove(post.edges, i)
      return
    end
  end
  fold_edge(post, stamp, -1, half_lives)
end

-- For each half-life of the boards, log2 of the post's decayed count plus now over the half-life:
-- a number that stays the same as time passes. '' where the post has no edge.
local function board_marks(post, now_ms, half_lives, board_slots)
  local marks = {}
  for i, j in ipairs(board_slots) do
    local half_life, total = half_lives[j], 0
    for _, stamp in ipairs(post.edges) do
      total = total + 2 ^ ((stamp_ms(stamp) - now_ms) / half_life)
    end
    for _, kind in ipairs(post.kinds) do
      total = total + kind.sums[j] * 2 ^ ((kind.as_of - now_ms) / half_life)
    end
    marks[i] = total > 0 and string.format('%.17g', math.log(total) / math.log(2) + now_ms / half_life) or ''
  end
  return marks
end

-- Read '3600000,10800000' as numbers.
local function numbers(text)
  local list = {}
  for word in string.gmatch(text, '[^,]+') do
    list[#list + 1] = tonumber(word)
  end
  return list
end
