/** Ways to spoil a frame, of its structure and of its bytes. Each draws what it does from the generator it is given. */
import type { Random } from '../../numerics/random.js';
import {
  allItems,
  floatItem,
  INDEFINITE,
  type Item,
  infoOf,
  item,
  MAJOR,
  simpleItem,
  textItem,
} from './cbor-items.js';

const one = <T>(random: Random, from: readonly T[]): T => from[random.integer(from.length)];
const bytesOf = (hex: string): Uint8Array => new Uint8Array(Buffer.from(hex, 'hex'));

/** Not finite, in 16, 32 and 64 bits. */
const NOT_FINITE = ['7e00', '7c00', 'fc00', '7fc00000', 'ff800000', '7ff0000000000000', '7ff8000000000001'];
const FINITE = [
  '8000',
  '3c00',
  '00000001',
  '7f7fffff',
  '7fefffffffffffff',
  '8000000000000000',
  '0000000000000001',
];
/** The same, little endian, as elements of a vector. */
const ELEMENTS = [
  '000000000000f07f',
  '000000000000f87f',
  '000000000000f0ff',
  '0000000000000080',
  '0100000000000000',
];
const ARGUMENTS = [
  ...[0n, 1n, 7n, 23n, 24n, 255n, 256n, 65_535n, 65_536n, 200_000n, 200_001n, 1_000_001n],
  ...[2n ** 31n, 2n ** 32n - 1n, 2n ** 32n, 2n ** 53n - 1n, 2n ** 53n, 2n ** 63n, 2n ** 64n - 1n],
];
const WORDS = [
  ...['', 'kind', 'version', 'run', 'ask', 'work', 'problem', 'points', 'want', '__proto__', 'constructor'],
  ...[
    'toString',
    'survey',
    'evaluate',
    'proximal',
    'factor',
    'joint',
    'scores',
    'site-fit',
    'margins',
    'quality',
    'part',
    '\u0000',
    '\u{1f300}',
    'x'.repeat(300),
  ],
];

/** An item of any kind, out of nowhere. */
function strangeItem(random: Random): Item {
  switch (random.integer(8)) {
    case 0:
      return item(random.integer(2), one(random, ARGUMENTS));
    case 1:
      return textItem(one(random, WORDS));
    case 2:
      return floatItem(bytesOf(one(random, [...NOT_FINITE, ...FINITE])));
    case 3:
      return simpleItem(random.integer(24));
    case 4:
      return item(4 + random.integer(2), 0n);
    case 5:
      return vectorItem(bytesOf(one(random, ELEMENTS)));
    case 6:
      return item(MAJOR.bytes, 3n, { bytes: Uint8Array.of(1, 2, 3) });
    default:
      return nested(random, 1 + random.integer(20));
  }
}

const vectorItem = (bytes: Uint8Array): Item =>
  item(MAJOR.tag, 86n, { items: [item(MAJOR.bytes, BigInt(bytes.length), { bytes })] });

function nested(random: Random, depth: number): Item {
  let inner = item(MAJOR.array, 0n);
  for (let i = 0; i < depth; i++) {
    inner =
      random.integer(2) === 0 ? listItem([inner]) : item(MAJOR.map, 1n, { items: [textItem('x'), inner] });
  }
  return inner;
}
const listItem = (items: Item[]): Item => item(MAJOR.array, BigInt(items.length), { items });

const has =
  (...majors: number[]) =>
  ({ major }: Item): boolean =>
    majors.includes(major);
const isOpen = (holder: Item): boolean => has(MAJOR.array, MAJOR.map)(holder);
const step = ({ major }: Item): number => (major === MAJOR.map ? 2 : 1);

/** Makes the head say again what is there. */
function recount(holder: Item): void {
  holder.argument = BigInt(holder.items.length / step(holder));
  if (holder.info !== INDEFINITE) holder.info = infoOf(holder.argument);
}

interface Spoiling {
  /** Which items it can be done to. */
  readonly fits: (target: Item) => boolean;
  readonly spoil: (target: Item, random: Random, other: Item) => void;
}

/** Changes of the structure. `other` is a tree to take something from. */
export const SPOILINGS: Readonly<Record<string, Spoiling>> = {
  'a field or element dropped': {
    fits: (target) => isOpen(target) && target.items.length > 0,
    spoil: (target, random) => {
      target.items.splice(random.integer(target.items.length / step(target)) * step(target), step(target));
      recount(target);
    },
  },
  'a field or element added': {
    fits: isOpen,
    spoil: (target, random) => {
      const added =
        target.major === MAJOR.map
          ? [textItem(one(random, WORDS)), strangeItem(random)]
          : [strangeItem(random)];
      target.items.splice(random.integer(target.items.length / step(target) + 1) * step(target), 0, ...added);
      recount(target);
    },
  },
  'a field or element twice': {
    fits: (target) => isOpen(target) && target.items.length > 0,
    spoil: (target, random) => {
      const at = random.integer(target.items.length / step(target)) * step(target);
      target.items.push(...target.items.slice(at, at + step(target)));
      recount(target);
    },
  },
  'fields or elements in another order': {
    fits: (target) => isOpen(target) && target.items.length > step(target),
    spoil: (target, random) => {
      const moved = target.items.splice(0, step(target));
      target.items.splice(random.integer(target.items.length / step(target) + 1) * step(target), 0, ...moved);
    },
  },
  'a field renamed': {
    fits: (target) => target.major === MAJOR.map && target.items.length > 0,
    spoil: (target, random) => {
      target.items[2 * random.integer(target.items.length / 2)] = textItem(one(random, WORDS));
    },
  },
  'another type': {
    fits: () => true,
    spoil: (target, random) => Object.assign(target, strangeItem(random)),
  },
  'a part of another message': {
    fits: () => true,
    spoil: (target, random, other) => Object.assign(target, structuredClone(one(random, allItems(other)))),
  },
  'a length or number that is off by one': {
    fits: ({ major }) => major !== MAJOR.simple,
    spoil: (target, random) => {
      target.argument = BigInt.asUintN(64, target.argument + (random.integer(2) === 0 ? 1n : -1n));
      target.info = infoOf(target.argument);
    },
  },
  'any length, number or tag': {
    fits: ({ major }) => major !== MAJOR.simple,
    spoil: (target, random) => {
      target.argument = one(random, ARGUMENTS);
      target.info = infoOf(target.argument);
    },
  },
  'a head in more bytes than needed': {
    fits: ({ major, info }) => major !== MAJOR.simple && info < 27,
    spoil: (target) => {
      target.info = Math.max(24, target.info + 1);
    },
  },
  'an indefinite length': {
    fits: ({ major }) => major !== MAJOR.simple,
    spoil: (target, random) => {
      const isText = has(MAJOR.bytes, MAJOR.text)(target);
      if (isText && random.integer(2) === 0) target.items = [structuredClone(target)];
      if (isText) target.bytes = new Uint8Array();
      target.info = INDEFINITE;
    },
  },
  'a reserved head': {
    fits: () => true,
    spoil: (target, random) => {
      target.info = 28 + random.integer(3);
    },
  },
  'a number that is not finite': {
    fits: has(MAJOR.unsigned, MAJOR.negative, MAJOR.simple),
    spoil: (target, random) => Object.assign(target, floatItem(bytesOf(one(random, NOT_FINITE)))),
  },
  'an element of a vector': {
    fits: ({ major, bytes }) => major === MAJOR.bytes && bytes.length >= 8,
    spoil: (target, random) => {
      target.bytes = target.bytes.slice();
      target.bytes.set(
        bytesOf(one(random, ELEMENTS)),
        8 * random.integer(Math.floor(target.bytes.length / 8)),
      );
    },
  },
  'bytes of a string more or less': {
    fits: has(MAJOR.bytes, MAJOR.text),
    spoil: (target, random) => {
      const by = 1 + random.integer(9);
      const shorter = target.bytes.slice(0, -by);
      target.bytes =
        random.integer(2) === 0
          ? shorter
          : new Uint8Array(Buffer.concat([target.bytes, Buffer.alloc(by, 0xc3)]));
      target.argument = BigInt(target.bytes.length);
      target.info = infoOf(target.argument);
    },
  },
  'nested deeply': {
    fits: () => true,
    spoil: (target, random) => {
      const inner = structuredClone(target);
      Object.assign(target, random.integer(2) === 0 ? listItem([inner]) : nested(random, random.integer(40)));
    },
  },
};

/** Spoils one item that `spoiling` fits; false where there is none. The tree is changed. */
export function spoilTree(root: Item, name: string, random: Random, other: Item): boolean {
  const { fits, spoil } = SPOILINGS[name];
  const targets = allItems(root).filter(fits);
  if (targets.length === 0) return false;
  spoil(one(random, targets), random, other);
  return true;
}

const around = (frame: Uint8Array, from: number, to: number, between: Uint8Array): Uint8Array =>
  new Uint8Array(Buffer.concat([frame.subarray(0, from), between, frame.subarray(to)]));
const noise = (random: Random, length: number): Uint8Array =>
  Uint8Array.from({ length }, () => random.integer(256));

/** Changes of the bytes, whatever they mean. `other` is a frame to take something from. */
export const DAMAGES: Readonly<
  Record<string, (frame: Uint8Array, random: Random, other: Uint8Array) => Uint8Array>
> = {
  'a bit flipped': (frame, random) => {
    const at = random.integer(frame.length);
    return around(frame, at, at + 1, Uint8Array.of(frame[at] ^ (1 << random.integer(8))));
  },
  'bytes overwritten': (frame, random) => {
    const at = random.integer(frame.length);
    const length = Math.min(1 + random.integer(8), frame.length - at);
    return around(frame, at, at + length, noise(random, length));
  },
  'bytes put in': (frame, random) => {
    const at = random.integer(frame.length + 1);
    return around(frame, at, at, noise(random, 1 + random.integer(8)));
  },
  'bytes taken out': (frame, random) => {
    const at = random.integer(frame.length);
    return around(frame, at, Math.min(at + 1 + random.integer(8), frame.length), new Uint8Array());
  },
  'cut off': (frame, random) => frame.slice(0, random.integer(frame.length)),
  'a piece twice': (frame, random) => {
    const at = random.integer(frame.length);
    return around(frame, at, at, frame.slice(at, at + 1 + random.integer(64)));
  },
  'two frames spliced': (frame, random, other) =>
    around(frame, random.integer(frame.length), frame.length, other.slice(random.integer(other.length))),
};
