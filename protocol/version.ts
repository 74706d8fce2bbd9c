/** The message schema's version: part of the subprotocol's name, of `hello` and of `welcome`. */
export const PROTOCOL_VERSION = 1;

/** WebSocket subprotocol both ends must agree on (RFC 6455, section 1.9). */
export const SUBPROTOCOL = `commonfit.v${PROTOCOL_VERSION}`;

/** Name and version of this implementation, sent in `hello` and `welcome`, recorded with every result. */
export const SOFTWARE = 'commonfit 0.1.0';
