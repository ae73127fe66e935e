-- Packed lists: entries of fixed width in one string. A 16-byte entry is 8 bytes of hash, then one little-endian
-- integer of time in milliseconds (48 bits) above a 16-bit code.
local function find_slot(text, needle, width)
  local at = string.find(text, needle, 1, true)
  while at and (at - 1) % width ~= 0 do
    at = string.find(text, needle, at + 1, true)
  end
  return at
end

local function slot_ms(text, at)
  local a, b, c, d, e, f = string.byte(text, at + 10, at + 15)
  return a + b * 256 + c * 65536 + d * 16777216 + e * 4294967296 + f * 1099511627776
end

local function slot_code(text, at)
  local low, high = string.byte(text, at + 8, at + 9)
  return low + high * 256
end

local function pack_stamp(ms, code)
  local bytes = { code % 256, math.floor(code / 256) }
  for i = 3, 8 do
    bytes[i] = ms % 256
    ms = math.floor(ms / 256)
  end
  return string.char(unpack(bytes))
end

-- Drop a list's leading entries older than `oldest`; returns the list and how many bytes went.
local function drop_older(text, oldest)
  local cut = 0
  while cut < #text and slot_ms(text, cut + 1) < oldest do
    cut = cut + 16
  end
  if cut == 0 then
    return text, 0
  end
  return string.sub(text, cut + 1), cut
end
