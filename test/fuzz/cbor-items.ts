/**
 * CBOR (RFC 8949) as a tree that can also say what is wrong: heads wider than needed, lengths that lie, indefinite
 * lengths, keys twice. What the codec's own encoder never writes, a fuzzer has to.
 */

/** One data item. Its `argument` is written as it stands, whether or not the content agrees with it. */
export interface Item {
  /** Major type, 0 to 7. */
  major: number;
  /** Additional information, 0 to 31: how the argument is written, or a simple value. */
  info: number;
  argument: bigint;
  /** Content of a byte or text string; the number of a float. */
  bytes: Uint8Array;
  /** Elements of an array, keys and values of a map by turns, the item of a tag, the chunks of an indefinite string. */
  items: Item[];
}

export const MAJOR = {
  unsigned: 0,
  negative: 1,
  bytes: 2,
  text: 3,
  array: 4,
  map: 5,
  tag: 6,
  simple: 7,
} as const;
export const INDEFINITE = 31;
const BREAK = 0xff;
const NONE = new Uint8Array();

/** The argument in as few bytes as it needs. */
export function infoOf(argument: bigint): number {
  if (argument < 24n) return Number(argument);
  if (argument < 0x100n) return 24;
  if (argument < 0x1_0000n) return 25;
  return argument < 0x1_0000_0000n ? 26 : 27;
}

export const item = (major: number, argument: bigint, more: Partial<Item> = {}): Item => ({
  ...{ major, argument, info: infoOf(argument), bytes: NONE, items: [] },
  ...more,
});
export const textItem = (text: string): Item => {
  const bytes = new TextEncoder().encode(text);
  return item(MAJOR.text, BigInt(bytes.length), { bytes });
};
/** A float of the width that `bytes` has: 2, 4 or 8. */
export const floatItem = (bytes: Uint8Array): Item =>
  item(MAJOR.simple, 0n, { info: { 2: 25, 4: 26 }[bytes.length] ?? 27, bytes });
export const simpleItem = (info: number): Item => item(MAJOR.simple, BigInt(info), { info });

/** The tree of a frame that is whole and has definite lengths only; anything else is a defect of the caller. */
export function readItems(frame: Uint8Array): Item {
  const [root, end] = readItem(frame, 0);
  if (end !== frame.length) throw new Error(`${frame.length - end} bytes follow the item`);
  return root;
}

function readItem(frame: Uint8Array, at: number): [Item, number] {
  const view = new DataView(frame.buffer, frame.byteOffset, frame.byteLength);
  const major = frame[at] >> 5;
  const info = frame[at] & 31;
  const width = info < 24 ? 0 : 1 << (info - 24);
  if (info > 27) throw new Error(`head ${frame[at]} at ${at}`);
  const start = at + 1 + width;
  if (major === MAJOR.simple) {
    return [item(major, BigInt(info), { info, bytes: frame.slice(at + 1, start) }), start];
  }
  let argument = BigInt(info);
  if (width > 0) argument = 0n;
  for (let i = 0; i < width; i++) argument = argument * 256n + BigInt(view.getUint8(at + 1 + i));
  if (major === MAJOR.bytes || major === MAJOR.text) {
    const end = start + Number(argument);
    return [item(major, argument, { info, bytes: frame.slice(start, end) }), end];
  }
  const items: Item[] = [];
  let next = start;
  for (let left = itemsIn(major, Number(argument)); left > 0; left--) {
    const [read, end] = readItem(frame, next);
    items.push(read);
    next = end;
  }
  return [item(major, argument, { info, items }), next];
}

function itemsIn(major: number, argument: number): number {
  if (major === MAJOR.array) return argument;
  if (major === MAJOR.map) return 2 * argument;
  return major === MAJOR.tag ? 1 : 0;
}

/** The bytes of a tree, lies and all. */
export function writeItems(root: Item): Uint8Array {
  const pieces: Uint8Array[] = [];
  write(root, pieces);
  return new Uint8Array(Buffer.concat(pieces));
}

function write({ major, info, argument, bytes, items }: Item, pieces: Uint8Array[]): void {
  pieces.push(Uint8Array.of((major << 5) | info));
  if (major !== MAJOR.simple && info >= 24 && info <= 27)
    pieces.push(argumentBytes(argument, 1 << (info - 24)));
  pieces.push(bytes);
  for (const inner of items) write(inner, pieces);
  if (info === INDEFINITE) pieces.push(Uint8Array.of(BREAK));
}

function argumentBytes(argument: bigint, width: number): Uint8Array {
  const bytes = new Uint8Array(width);
  let rest = argument;
  for (let i = width - 1; i >= 0; i--) {
    bytes[i] = Number(rest & 0xffn);
    rest >>= 8n;
  }
  return bytes;
}

/** Every item of a tree, the root first. */
export function allItems(root: Item): Item[] {
  return [root, ...root.items.flatMap(allItems)];
}
