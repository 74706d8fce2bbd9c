import { isUtf8 } from 'node:buffer';
import { type Failure, type FailureCode, fail } from './failure.js';
import { LIMITS } from './limits.js';

/** RFC 8746, section 2: typed array of IEEE 754 binary64, little endian. */
export const FLOAT64_LE_TAG = 86;

/** Major types of RFC 8949, section 3.1. */
const UNSIGNED = 0;
const NEGATIVE = 1;
const BYTES = 2;
const TEXT = 3;
const ARRAY = 4;
const MAP = 5;
const TAG = 6;

/** Bytes of argument after the initial byte, by additional information (0 to 27). */
const argumentBytes = (info: number): number => (info < 24 ? 0 : 1 << (info - 24));

/** A place in the frame that breaks the rules; carried as a value inside this file only. */
interface Break {
  readonly code: FailureCode;
  readonly found: string;
}
const malformed = (found: string): Break => ({ code: 'frame-malformed', found });

/**
 * Walks the heads of a frame's CBOR items (RFC 8949) without building anything, so that no memory is spent on a frame
 * that breaks a limit. Accepts one map of definite-length items: integers, text in UTF-8, arrays, maps, tag 86 on a
 * byte string of whole float64 numbers, false, true, null and finite floats. Null where the frame may be decoded.
 */
export function scanFrame(bytes: Uint8Array): Failure | null {
  if (bytes.length > LIMITS.frameBytesMost) {
    return fail(
      'frame-too-large',
      `The frame has ${bytes.length} bytes; at most ${LIMITS.frameBytesMost} are allowed.`,
    ).failure;
  }
  const scan = new Scan(bytes);
  const broken = scan.run();
  return broken === null ? null : fail(broken.code, `Byte ${scan.at} of the frame: ${broken.found}.`).failure;
}

class Scan {
  at = 0;
  private items = 0;
  private depth = 0;
  /** Items still to come in each open array or map, outermost first. */
  private readonly left: number[] = [];
  private readonly view: DataView;

  constructor(private readonly bytes: Uint8Array) {
    this.view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength);
  }

  run(): Break | null {
    if (this.bytes.length === 0 || this.bytes[0] >> 5 !== MAP) return malformed('a message is one map');
    do {
      const broken = this.item();
      if (broken !== null) return broken;
      while (this.depth > 0 && this.left[this.depth - 1] === 0) this.depth--;
    } while (this.depth > 0);
    return this.at === this.bytes.length ? null : malformed('bytes follow the end of the message');
  }

  /** One item, or the head of an array or map whose items come next. */
  private item(): Break | null {
    if (this.depth > 0) this.left[this.depth - 1]--;
    if (++this.items > LIMITS.itemsMost) return malformed(`more than ${LIMITS.itemsMost} items`);
    if (this.at >= this.bytes.length) return malformed('the frame ends inside the message');
    const major = this.bytes[this.at] >> 5;
    const info = this.bytes[this.at] & 31;
    if (info > 27) return malformed(info === 31 ? 'a length is indefinite' : 'a reserved head');
    const headBytes = 1 + argumentBytes(info);
    if (this.at + headBytes > this.bytes.length) return malformed('the frame ends inside the message');
    if (major === TAG) return this.vector(headBytes);
    if (major === 7) return this.simple(info, headBytes);
    if (major === UNSIGNED || major === NEGATIVE) {
      this.at += headBytes;
      return null;
    }
    const argument = this.argument(info);
    this.at += headBytes;
    if (major === TEXT) return this.text(argument);
    if (major === MAP && argument > LIMITS.fieldsMost)
      return malformed(`more than ${LIMITS.fieldsMost} fields`);
    if (major === ARRAY || major === MAP) return this.open(argument, major === MAP ? 2 : 1);
    return malformed('a byte string that is not a float64 vector');
  }

  private argument(info: number): number {
    if (info < 24) return info;
    if (info === 24) return this.view.getUint8(this.at + 1);
    if (info === 25) return this.view.getUint16(this.at + 1);
    if (info === 26) return this.view.getUint32(this.at + 1);
    return this.view.getUint32(this.at + 1) * 2 ** 32 + this.view.getUint32(this.at + 5);
  }

  private open(elements: number, itemsPerElement: number): Break | null {
    if (elements > LIMITS.elementsMost) return malformed(`more than ${LIMITS.elementsMost} elements`);
    const items = elements * itemsPerElement;
    if (items > this.bytes.length - this.at) return malformed('the frame ends inside the message');
    if (items === 0) return null;
    if (this.depth === LIMITS.nestingMost) return malformed(`nested deeper than ${LIMITS.nestingMost}`);
    this.left[this.depth++] = items;
    return null;
  }

  private text(length: number): Break | null {
    if (length > LIMITS.textMost) return malformed(`a text of more than ${LIMITS.textMost} bytes`);
    if (length > this.bytes.length - this.at) return malformed('the frame ends inside the message');
    if (!isUtf8(this.bytes.subarray(this.at, this.at + length))) return malformed('a text that is not UTF-8');
    this.at += length;
    return null;
  }

  /** Tag 86 and its byte string; the numbers are not read here. */
  private vector(headBytes: number): Break | null {
    if (this.argument(this.bytes[this.at] & 31) !== FLOAT64_LE_TAG) {
      return malformed(`a tag other than ${FLOAT64_LE_TAG}`);
    }
    this.at += headBytes;
    if (this.at >= this.bytes.length) return malformed('the frame ends inside the message');
    const info = this.bytes[this.at] & 31;
    if (this.bytes[this.at] >> 5 !== BYTES || info > 27)
      return malformed('a vector is a definite byte string');
    const lengthBytes = 1 + argumentBytes(info);
    if (this.at + lengthBytes > this.bytes.length) return malformed('the frame ends inside the message');
    const length = this.argument(info);
    this.at += lengthBytes;
    if (length > this.bytes.length - this.at) return malformed('the frame ends inside the message');
    if (length % 8 !== 0) return malformed(`a vector of ${length} bytes, which is no multiple of 8`);
    this.at += length;
    return null;
  }

  /** false, true, null and floats of 16, 32 or 64 bits, which are not finite where every exponent bit is set. */
  private simple(info: number, headBytes: number): Break | null {
    const isFloat = info >= 25;
    if (!isFloat && (info < 20 || info > 22))
      return malformed('a simple value other than false, true and null');
    if (isFloat) {
      const exponentMask = info === 25 ? 0x7c00 : info === 26 ? 0x7f80 : 0x7ff0;
      if ((this.view.getUint16(this.at + 1) & exponentMask) === exponentMask) {
        return { code: 'number-not-finite', found: 'a number that is not finite' };
      }
    }
    this.at += headBytes;
    return null;
  }
}
