import { request } from 'node:https';
import { Readable } from 'node:stream';

/** What this program asks of `fetch`. */
interface Asked {
  readonly method: string;
  readonly headers: Record<string, string>;
  readonly body?: string;
  readonly signal?: AbortSignal;
}

/** `fetch`; with an authority of its own (PEM), which `fetch` cannot be given, over the https client. */
export function requestTo(ca: string | null): (url: string, asked: Asked) => Promise<Response> {
  return (url, asked) =>
    ca === null || !url.startsWith('https:') ? fetch(url, asked) : overHttps(url, ca, asked);
}

function overHttps(url: string, ca: string, asked: Asked): Promise<Response> {
  const { method, headers, body, signal } = asked;
  return new Promise((resolve, reject) => {
    const options = { ca, method, headers, ...(signal === undefined ? {} : { signal }) };
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
