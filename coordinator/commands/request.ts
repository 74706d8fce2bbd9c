import { request } from 'node:https';
import { Readable } from 'node:stream';
import type { KeyPair } from '../../protocol/link/key-pair.js';

/** What this program asks of `fetch`. */
interface Asked {
  readonly method: string;
  readonly headers: Record<string, string>;
  readonly body?: string;
  readonly signal?: AbortSignal;
}

/** Whom to trust and what to show over https, PEM text; null: the system's authorities, and no certificate. */
export interface Trust {
  readonly ca: string | null;
  readonly pair: KeyPair | null;
}

/** `fetch`; with an authority or a certificate of its own, which `fetch` cannot be given, over the https client. */
export function requestTo(trust: Trust): (url: string, asked: Asked) => Promise<Response> {
  const plain = trust.ca === null && trust.pair === null;
  return (url, asked) =>
    plain || !url.startsWith('https:') ? fetch(url, asked) : overHttps(url, trust, asked);
}

function overHttps(url: string, { ca, pair }: Trust, asked: Asked): Promise<Response> {
  const { method, headers, body, signal } = asked;
  return new Promise((resolve, reject) => {
    const trust = { ...(ca === null ? {} : { ca }), ...pair };
    const options = { ...trust, method, headers, ...(signal === undefined ? {} : { signal }) };
    const sent = request(url, options, (reply) => {
      const type = reply.headers['content-type'];
      resolve(
        new Response(Readable.toWeb(reply) as ReadableStream<Uint8Array>, {
          status: reply.statusCode ?? 500,
          headers: type === undefined ? {} : { 'content-type': type },
        }),
      );
    });
    sent.on('error', reject);
    sent.end(body);
  });
}
