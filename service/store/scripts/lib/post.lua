-- A post's value: a fixed header, the texts, the times of its post events, its newest edges as they are,
-- and for each kind the running sums of the older ones. service/store/records.py reads the same layout.
-- header  <version B><flags B><audience B><form length B><edges H><kinds H><id length H><author length H>
--         <event length H><topics length H><post events H><creation code H><created d><latest d><author hash 8>
-- edge    <stamp: little-endian integer, time in ms (48 bits) above the code (16 bits)>
-- kind    <code H><pad H><count l><as-of ms d><one sum d for each half-life>
local HEADER = '<BBBBHHHHHHHHddc8'
local HEADER_SIZE = 44
local WITHDRAWN, RECORDED = 1, 2
local RAW_EDGES = 16
local MOST_RAW_EDGES, MOST_POST_EVENTS = 1024, 256
local NOBODY = string.rep('\0', 8)

local function new_post()
  return { flags = 0, audience = 0, form = '', id = '', author = '', event = '', topics = '', edits = {},
    creation = 0, created = 0, latest = 0, author_hash = NOBODY, edges = '', kinds = {} }
end

local function stamp_ms(text, at)
  local a, b, c, d, e, f = string.byte(text, at + 2, at + 7)
  return a + b * 256 + c * 65536 + d * 16777216 + e * 4294967296 + f * 1099511627776
end

local function stamp_code(stamp)
  local low, high = string.byte(stamp, 1, 2)
  return low + high * 256
end

-- A kind is {code, padding, count, as-of ms, sums…}: the fields of its layout in their order.
local CODE, COUNT, AS_OF, BEFORE_SUMS = 1, 3, 4, 4

local function kind_layout(bank_size)
  return '<HHi4d' .. string.rep('d', bank_size)
end

local function read_post(value, bank_size)
  if not value then
    return new_post()
  end
  local post, version = new_post(), nil
  local form_n, edge_n, kind_n, id_n, author_n, event_n, topic_n, edit_n
  version, post.flags, post.audience, form_n, edge_n, kind_n, id_n, author_n, event_n, topic_n, edit_n,
    post.creation, post.created, post.latest, post.author_hash = struct.unpack(HEADER, value)
  local at = HEADER_SIZE + 1
  local function text(length)
    at = at + length
    return string.sub(value, at - length, at - 1)
  end
  post.id, post.author, post.form = text(id_n), text(author_n), text(form_n)
  post.event, post.topics = text(event_n), text(topic_n)
  if edit_n > 0 then
    post.edits = { struct.unpack('<' .. string.rep('d', edit_n), value, at) }
    at = table.remove(post.edits)
  end
  post.edges = text(8 * edge_n)
  local layout = kind_layout(bank_size)
  for i = 1, kind_n do
    local kind = { struct.unpack(layout, value, at) }
    at = table.remove(kind)
    post.kinds[i] = kind
  end
  return post
end

-- Write a post and return its value. Each write prolongs the post's life, up to 12 lifetimes after its creation.
local function write_post(key, post, bank_size, ttl_ms, now_ms)
  if post.created > 0 then
    ttl_ms = math.max(1, math.min(ttl_ms, post.created + 12 * ttl_ms - now_ms))
  end
  local parts = { struct.pack(HEADER, 1, post.flags, post.audience, #post.form, #post.edges / 8, #post.kinds, #post.id,
    #post.author, #post.event, #post.topics, #post.edits, post.creation, post.created, post.latest, post.author_hash),
    post.id, post.author, post.form, post.event, post.topics,
    struct.pack('<' .. string.rep('d', #post.edits), unpack(post.edits)), post.edges }
  local layout = kind_layout(bank_size)
  for _, kind in ipairs(post.kinds) do
    parts[#parts + 1] = struct.pack(layout, unpack(kind))
  end
  local value = table.concat(parts)
  redis.call('SET', key, value, 'PX', string.format('%.0f', ttl_ms))
  return value
end
