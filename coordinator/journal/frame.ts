import { crc32 } from 'node:zlib';

/**
 * How a record stands in the journal, little endian:
 * marker `cfj1` (4 bytes) · payload length (4) · CRC-32 of the payload (4) · CRC-32 of the 12 bytes before (4) · payload.
 * The header has its own check, so that a damaged length is not taken for a record that was cut off.
 */
export const HEADER_BYTES = 16;
export const MARKER = new TextEncoder().encode('cfj1');

export function frameRecord(payload: Uint8Array): Uint8Array {
  const frame = new Uint8Array(HEADER_BYTES + payload.length);
  frame.set(payload, HEADER_BYTES);
  return withHeader(frame);
}

/** Fills in the header of a frame whose payload stands in its place already. */
export function withHeader(frame: Uint8Array): Uint8Array {
  const view = new DataView(frame.buffer, frame.byteOffset, frame.byteLength);
  const payload = frame.subarray(HEADER_BYTES);
  frame.set(MARKER);
  view.setUint32(4, payload.length, true);
  view.setUint32(8, crc32(payload), true);
  view.setUint32(12, crc32(frame.subarray(0, 12)), true);
  return frame;
}

/** The payload's length and check, or null when these are not the bytes of a whole header. */
export function readHeader(bytes: Uint8Array): { length: number; check: number } | null {
  if (bytes.length < HEADER_BYTES || MARKER.some((byte, i) => bytes[i] !== byte)) return null;
  const view = new DataView(bytes.buffer, bytes.byteOffset, HEADER_BYTES);
  if (view.getUint32(12, true) !== crc32(bytes.subarray(0, 12))) return null;
  return { length: view.getUint32(4, true), check: view.getUint32(8, true) };
}

export const matchesCheck = (payload: Uint8Array, check: number): boolean => crc32(payload) === check;
