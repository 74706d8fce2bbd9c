import { CLOSE_CODES, type CloseCode } from '../close-codes.js';
import type { Failure } from '../failure.js';

/** The close code that tells a peer why its frame was refused. */
export function closeCodeOf(failure: Failure): CloseCode {
  switch (failure.code) {
    case 'frame-too-large':
      return CLOSE_CODES.frameTooLarge;
    case 'message-unknown':
      return CLOSE_CODES.messageUnexpected;
    case 'version-unsupported':
      return CLOSE_CODES.versionUnsupported;
    case 'token-refused':
      return CLOSE_CODES.tokenRefused;
    default:
      return CLOSE_CODES.frameMalformed;
  }
}

/** RFC 6455, section 5.5: a control frame carries at most 125 bytes, two of which are the code. */
const REASON_BYTES_MOST = 123;

/** As much of `text` as a close frame can carry, cut between characters. */
export function closeReason(text: string): string {
  const bytes = new TextEncoder().encode(text);
  if (bytes.length <= REASON_BYTES_MOST) return text;
  let end = REASON_BYTES_MOST;
  // A continuation byte of UTF-8 starts with the bits 10: the cut must not fall before one.
  while ((bytes[end] & 0xc0) === 0x80) end--;
  return new TextDecoder().decode(bytes.subarray(0, end));
}
