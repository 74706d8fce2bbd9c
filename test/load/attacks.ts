import { Agent, request } from 'node:http';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { encodeMessage } from '../../protocol/codec.js';
import { frameHead } from '../support/raw-socket.js';
import { helloOf, malformedFrames, unasked } from './malformed.js';
import { frame, inTurns, Peer, type Refusal } from './peer.js';

/** Whom the attacks come from: sites that were admitted and misbehave, and addresses of loopback. */
export interface Attackers {
  readonly address: string;
  readonly sites: readonly { readonly site: string; readonly token: string }[];
}

/** Peers that take no part in the closing handshake keep their links for some seconds: many at once, then. */
const LINKS_AT_ONCE = 40;

/** Shards from which the flood of answers comes, so that it meets no other attack's. */
const UNASKED_FROM = 500;

/** How often each refusal came, and how many connections ended without one. */
export type Tally = Map<Refusal | 'no code', number>;

const count = (tally: Tally, refusal: Refusal | null): void => {
  const key = refusal ?? 'no code';
  tally.set(key, (tally.get(key) ?? 0) + 1);
};

/** 127.0.0.2 and on: the workers and the analyst are at 127.0.0.1. */
const addressOf = (index: number, addresses = 8): string => `127.0.0.${2 + (index % addresses)}`;

const siteOf = ({ sites }: Attackers, index: number) => sites[index % sites.length];

async function linkOf(attackers: Attackers, index: number): Promise<Peer> {
  const peer = new Peer(attackers.address, addressOf(index));
  peer.upgrade(siteOf(attackers, index).token);
  await peer.linked();
  return peer;
}

/** Sends `frames` malformed frames over `links` links, every other of them greeted; each link must close by the code of its first. */
export async function malformed(attackers: Attackers, frames: number, links: number): Promise<Tally> {
  const kinds = malformedFrames();
  const tally: Tally = new Map();
  const perLink = Math.ceil(frames / links);
  await inTurns(links, LINKS_AT_ONCE, async (index) => {
    const peer = await linkOf(attackers, index);
    if (index % 2 === 0) peer.write(frame(encodeMessage(helloOf(siteOf(attackers, index).site, index))));
    const batch = Buffer.concat(
      Array.from({ length: perLink }, (_, at) => frame(kinds[(index + at) % kinds.length].payload)),
    );
    peer.write(batch);
    const expected = kinds[index % kinds.length];
    await peer.ended;
    const refusal = peer.refusal();
    if (refusal !== `close ${expected.closes}`) {
      throw new Error(`${expected.name}: refused with ${refusal}, not ${expected.closes}`);
    }
    count(tally, refusal);
  });
  return tally;
}

/** Connections that never finish their upgrade, and links that never say hello. */
export async function halfOpen(attackers: Attackers, connections: number, links: number): Promise<Tally> {
  const tally: Tally = new Map();
  const heads = ['', 'GET /v1/site HTTP/1.1\r\n', 'GET /v1/site HTTP/1.1\r\nHost: c\r\nUpgrade: webs'];
  const upgraded = inTurns(links, links, async (index) => {
    const peer = await linkOf(attackers, index);
    // a frame within the limit of which nothing comes but its head is no hello either
    if (index % 4 === 0) peer.write(frameHead(100_000_000n));
    await peer.ended;
    count(tally, peer.refusal());
  });
  const idle = inTurns(connections, connections, async (index) => {
    const peer = new Peer(attackers.address, addressOf(index));
    peer.write(heads[index % heads.length]);
    await peer.ended;
    count(tally, peer.refusal());
  });
  await Promise.all([upgraded, idle]);
  return tally;
}

/** Frames that promise 200 MB and bring nothing. */
export async function promised(attackers: Attackers, links: number): Promise<Tally> {
  const tally: Tally = new Map();
  await inTurns(links, LINKS_AT_ONCE, async (index) => {
    const peer = await linkOf(attackers, index);
    peer.write(frameHead(200_000_000n));
    await peer.ended;
    const refusal = peer.refusal();
    if (refusal !== `close ${CLOSE_CODES.frameTooLarge}`) throw new Error(`200 MB: refused with ${refusal}`);
    count(tally, refusal);
  });
  return tally;
}

/** Answers nobody asked for, in masses, on greeted links. */
export async function unaskedFlood(attackers: Attackers, links: number, perLink: number): Promise<Tally> {
  const tally: Tally = new Map();
  const flood = Buffer.concat(Array.from({ length: perLink }, () => frame(encodeMessage(unasked))));
  await inTurns(links, LINKS_AT_ONCE, async (index) => {
    const peer = await linkOf(attackers, index);
    peer.write(frame(encodeMessage(helloOf(siteOf(attackers, index).site, UNASKED_FROM + index))));
    peer.write(flood);
    await peer.ended;
    count(tally, peer.refusal());
  });
  return tally;
}

/** Wrong tokens: half of them for a link, half for the analysts' routes. */
export async function wrongTokens(attackers: Attackers, tokens: number): Promise<Tally> {
  const tally: Tally = new Map();
  const agents = Array.from(
    { length: 8 },
    (_, index) => new Agent({ keepAlive: true, maxSockets: 2, localAddress: addressOf(index) }),
  );
  await Promise.all([
    inTurns(Math.floor(tokens / 2), 16, async (index) => {
      const peer = new Peer(attackers.address, addressOf(index));
      peer.upgrade(`wrong${index}`);
      await peer.ended;
      count(tally, peer.refusal());
    }),
    inTurns(Math.ceil(tokens / 2), 16, async (index) => {
      count(tally, await analystRefusal(attackers.address, agents[index % agents.length], `wrong${index}`));
    }),
  ]);
  for (const agent of agents) agent.destroy();
  return tally;
}

function analystRefusal(address: string, agent: Agent, token: string): Promise<Refusal | null> {
  return new Promise((resolve) => {
    const headers = { authorization: `Bearer ${token}` };
    const sent = request(`${address}/v1/runs`, { agent, headers }, async (response) => {
      let body = '';
      for await (const piece of response) body += String(piece);
      const code = /"code":"([a-z-]+)"/.exec(body)?.[1];
      resolve(code === undefined ? null : `http ${response.statusCode ?? 0} ${code}`);
    });
    sent.on('error', () => resolve(null));
    sent.end();
  });
}
