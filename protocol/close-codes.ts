/** WebSocket close codes of this protocol (4000-4999 is the private range of RFC 6455, section 7.4.2). */
export const CLOSE_CODES = {
  /** RFC 6455: normal end. */
  normal: 1000,
  /** RFC 6455: the process is stopping; come back later. */
  goingAway: 1001,
  /** RFC 6455: never sent; what a side sees when the connection broke without a close frame. */
  connectionLost: 1006,
  /** RFC 6455: a frame larger than the limit. */
  frameTooLarge: 1009,
  /** The bytes are not one CBOR map within the limits. */
  frameMalformed: 4000,
  /** A well-formed message that this side does not take, or not now. */
  messageUnexpected: 4001,
  /** No common protocol version. */
  versionUnsupported: 4002,
  /** The token is missing, unknown or speaks for another site. */
  tokenRefused: 4003,
  /** The same member has a link that was opened later: the older one gets this code. */
  replaced: 4004,
  /** No `hello` in time. */
  helloLate: 4005,
  /** The peer reads or answers too slowly for the bounded buffers. */
  tooSlow: 4006,
  /** The certificate of the worker is missing, not trusted, or another site's, or has expired since. */
  certificateRefused: 4007,
} as const;

export type CloseCode = (typeof CLOSE_CODES)[keyof typeof CLOSE_CODES];
