import { until } from './processes.js';
import { RawSocket } from './raw-socket.js';

/** How a request was refused over HTTP. */
export interface Refusal {
  readonly status: number;
  readonly code: unknown;
  readonly retryAfterS: number | null;
}

export async function refusalOf(response: Response): Promise<Refusal> {
  const retryAfter = response.headers.get('retry-after');
  const { code } = (await response.json()) as { code: unknown };
  return { status: response.status, code, retryAfterS: retryAfter === null ? null : Number(retryAfter) };
}

/** The same of a response as it came over the wire. */
export function refusalIn(raw: Buffer): Refusal {
  const [head, body] = raw.toString('utf8').split('\r\n\r\n');
  const retryAfter = /^retry-after: (\d+)/im.exec(head)?.[1];
  return {
    status: Number(/^HTTP\/1\.1 (\d{3}) /.exec(head)?.[1]),
    code: (JSON.parse(body ?? '') as { code: unknown }).code,
    retryAfterS: retryAfter === undefined ? null : Number(retryAfter),
  };
}

/** How a coordinator refuses to upgrade a connection with this token. */
export async function upgradeRefusal(address: string, token: string): Promise<Refusal> {
  const raw = await RawSocket.open(address);
  raw.write(
    'GET /v1/site HTTP/1.1\r\nHost: c\r\nConnection: Upgrade\r\nUpgrade: websocket\r\n' +
      `Authorization: Bearer ${token}\r\n\r\n`,
  );
  await until('a refusal', () => raw.ended);
  return refusalIn(raw.received);
}
