-- The edges and sums of a post's value (lib/post.lua), without reading the record before them.
local NOTHING = struct.pack(HEADER, 1, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, NOBODY)

-- Returns {head: all before the edges, id, created, author_hash, edges, sums: the packed kinds}.
local function open_post(value, new_id)
  if not value then
    local head = string.sub(NOTHING, 1, 8) .. struct.pack('<H', #new_id) .. string.sub(NOTHING, 11) .. new_id
    return { head = head, id = new_id, created = 0, author_hash = NOBODY, edges = '', sums = '' }
  end
  local form_n, edge_n, _, id_n, author_n, event_n, topic_n, edit_n = struct.unpack('<BHHHHHHH', value, 4)
  local last = HEADER_SIZE + form_n + id_n + author_n + event_n + topic_n + 8 * edit_n
  return { head = string.sub(value, 1, last), id = string.sub(value, HEADER_SIZE + 1, HEADER_SIZE + id_n),
    created = struct.unpack('<d', value, 21), author_hash = string.sub(value, 37, 44),
    edges = string.sub(value, last + 1, last + 8 * edge_n), sums = string.sub(value, last + 8 * edge_n + 1) }
end

-- As write_post in lib/post.lua. Each write prolongs the post's life, up to 12 lifetimes after its creation.
local function close_post(key, post, kind_size, ttl_ms, now_ms)
  local px = ttl_ms
  if post.created > 0 then
    px = string.format('%.0f', math.max(1, math.min(ttl_ms, post.created + 12 * ttl_ms - now_ms)))
  end
  local counts = struct.pack('<HH', #post.edges / 8, #post.sums / kind_size)
  local value = string.sub(post.head, 1, 4) .. counts .. string.sub(post.head, 9) .. post.edges .. post.sums
  redis.call('SET', key, value, 'PX', px)
  return counts
end
