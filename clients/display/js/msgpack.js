// @ts-check
/** Reads msgpack: what the service sends, and no more: no extension types. */

const text = new TextDecoder();

/** @param {Uint8Array} bytes one value @returns {unknown} 64-bit integers as numbers: times round to 256 ns */
export function decode(bytes) {
  const reader = new Reader(bytes);
  return reader.value();
}

class Reader {
  /** @param {Uint8Array} bytes */
  constructor(bytes) {
    this.bytes = bytes;
    this.view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength);
    this.at = 0;
  }

  /** @returns {unknown} */
  value() {
    const c = this.view.getUint8(this.at++);
    if (c < 0x80) return c;
    if (c < 0x90) return this.map(c & 15);
    if (c < 0xa0) return this.list(c & 15);
    if (c < 0xc0) return this.string(c & 31);
    if (c >= 0xe0) return c - 256;
    return this.other(c);
  }

  /** @param {number} c @returns {unknown} */
  other(c) {
    switch (c) {
      case 0xc0: return null;
      case 0xc2: return false;
      case 0xc3: return true;
      case 0xc4: return this.raw(this.uint(1));
      case 0xc5: return this.raw(this.uint(2));
      case 0xc6: return this.raw(this.uint(4));
      case 0xca: return this.view.getFloat32(this.step(4));
      case 0xcb: return this.view.getFloat64(this.step(8));
      case 0xcc: return this.uint(1);
      case 0xcd: return this.uint(2);
      case 0xce: return this.uint(4);
      case 0xcf: return Number(this.view.getBigUint64(this.step(8)));
      case 0xd0: return this.view.getInt8(this.step(1));
      case 0xd1: return this.view.getInt16(this.step(2));
      case 0xd2: return this.view.getInt32(this.step(4));
      case 0xd3: return Number(this.view.getBigInt64(this.step(8)));
      case 0xd9: return this.string(this.uint(1));
      case 0xda: return this.string(this.uint(2));
      case 0xdb: return this.string(this.uint(4));
      case 0xdc: return this.list(this.uint(2));
      case 0xdd: return this.list(this.uint(4));
      case 0xde: return this.map(this.uint(2));
      case 0xdf: return this.map(this.uint(4));
      default: throw new RangeError(`msgpack byte ${c} is of no kind that is read here`);
    }
  }

  /** @param {number} size @returns {number} the place before it moved on */
  step(size) {
    const at = this.at;
    this.at += size;
    return at;
  }

  /** @param {1 | 2 | 4} size */
  uint(size) {
    const at = this.step(size);
    return size === 1 ? this.view.getUint8(at) : size === 2 ? this.view.getUint16(at) : this.view.getUint32(at);
  }

  /** @param {number} size */
  raw(size) {
    if (this.at + size > this.bytes.length) throw new RangeError("msgpack ends too soon");
    return this.bytes.subarray(this.at, (this.at += size));
  }

  /** @param {number} size */
  string(size) {
    return text.decode(this.raw(size));
  }

  /** @param {number} size */
  list(size) {
    const found = [];
    for (let i = 0; i < size; i++) found.push(this.value());
    return found;
  }

  /** @param {number} size */
  map(size) {
    /** @type {Record<string, unknown>} */
    const found = {};
    for (let i = 0; i < size; i++) {
      const key = String(this.value());
      found[key] = this.value();
    }
    return found;
  }
}
