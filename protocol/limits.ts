/** Limits of the wire. Each is checked before memory is spent on what it bounds. */
export const LIMITS = {
  /** Largest frame either side accepts, in bytes: a curvature matrix of 5,000 columns with room to spare. */
  frameBytesMost: 128 * 1024 * 1024,
  /** Deepest nesting of maps and arrays in one frame. */
  nestingMost: 12,
  /** Most elements in one array of a frame (vectors are byte strings, not arrays). */
  elementsMost: 1_250_000,
  /** Most fields of one map: no message has nearly as many, and a reader pays dearly for names it does not know. */
  fieldsMost: 64,
  /** Most data items in one frame, map keys counted too. */
  itemsMost: 2_500_000,
  /** Longest text string, in bytes of UTF-8: a fit specification fits. */
  textMost: 1_000_000,
  /** Most coefficients of one fit: their names travel in one array. */
  coefficientsMost: 1_250_000,
  /** Most problems in one proximal work item, most points in one evaluate work item. */
  batchMost: 4096,
  /** Most folds of a cross-validation. */
  foldsMost: 100,
  /** Most bytes that may wait to be sent on one link; a message that would pass it is not queued. */
  sendBufferBytesMost: 256 * 1024 * 1024,
  /** A peer that has not sent `hello` within this time after the upgrade is closed. Milliseconds. */
  helloDeadlineMs: 10_000,
  /** Ping interval and the silence after which a link counts as dead. Milliseconds. */
  pingEveryMs: 10_000,
  silenceMostMs: 120_000,
  /** A peer that takes what waits for it more slowly than this, and `silenceMostMs`, is closed. Bytes a second. */
  readBytesPerSecondLeast: 4096,
  /** How long the peer has for its half of the closing handshake. Milliseconds. */
  closeDeadlineMs: 5000,
} as const;
