import { describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import { until } from '../support/processes.js';
import {
  analystToken,
  connectBoth,
  expectRunSolved,
  follow,
  MEANS,
  siteToken,
  socketOf,
  start,
  submit,
} from '../support/service-bench.js';
import { TOY_ROUNDS, toyAnswer } from '../support/toy-run.js';
import { helloOf, ToySocket, toySite } from '../support/toy-site.js';

describe('workers that do not keep to the protocol', () => {
  test.each([['wrong'], ['']])('token "%s" is refused before the upgrade', async (token) => {
    const address = await start();
    const refused = await ToySocket.open(address, token);
    expect(refused).toMatchObject({ status: 401, type: 'application/problem+json' });
    expect('body' in refused && JSON.parse(refused.body)).toMatchObject({ code: 'token-refused' });
    await expectRunSolved(address);
  });

  test('an analyst is no site, and another subprotocol is none of ours', async () => {
    const address = await start();
    expect(await ToySocket.open(address, await analystToken())).toMatchObject({ status: 401 });
    const token = await siteToken('harrowmere');
    expect(await ToySocket.open(address, token, 'commonfit.v99')).toMatchObject({ status: 426 });
  });

  test('more workers than there is room for', async () => {
    const address = await start({ linksMost: 1 });
    await socketOf(address, 'harrowmere');
    expect(await ToySocket.open(address, await siteToken('castlefen'))).toMatchObject({ status: 503 });
  });

  test.each<[string, (socket: ToySocket) => void, number]>([
    ['a hello of another site', (socket) => socket.send(helloOf('oakhythe')), CLOSE_CODES.tokenRefused],
    [
      'another version',
      (socket) => socket.send({ ...helloOf('harrowmere'), version: 2 } as never),
      CLOSE_CODES.versionUnsupported,
    ],
    [
      'an answer before hello',
      (socket) =>
        socket.send({
          kind: 'answer',
          run: 'r',
          ask: 1,
          work: [{ work: 'factor', factors: [Float64Array.of(1)] }],
        }),
      CLOSE_CODES.messageUnexpected,
    ],
    [
      'a shard that cannot be',
      (socket) => socket.send({ ...helloOf('harrowmere'), shard: { index: 3, of: 2 } }),
      CLOSE_CODES.messageUnexpected,
    ],
    ['garbage', (socket) => socket.socket.send(Buffer.from([0xff, 1, 2])), CLOSE_CODES.frameMalformed],
    ['a text frame', (socket) => socket.socket.send('hello'), CLOSE_CODES.frameMalformed],
    [
      'a frame over the limit',
      (socket) => socket.socket.send(Buffer.alloc(LIMITS.frameBytesMost + 1)),
      CLOSE_CODES.frameTooLarge,
    ],
  ])('%s closes the link with its code, and the service goes on', async (_, misbehave, code) => {
    const address = await start();
    const socket = await socketOf(address, 'harrowmere');
    misbehave(socket);
    expect(await socket.closed).toBe(code);
    await expectRunSolved(address);
  });

  test('of two links of one member the newer wins', async () => {
    const address = await start();
    const token = await siteToken('harrowmere');
    const older = await toySite(address, token, 'harrowmere', 1);
    const newer = await toySite(address, token, 'harrowmere', MEANS.harrowmere);
    expect(await older.closed).toBe(CLOSE_CODES.replaced);
    await toySite(address, await siteToken('castlefen'), 'castlefen', MEANS.castlefen);
    expect((await follow(await submit())).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect(newer.received[0]).toMatchObject({ kind: 'welcome' });
  });

  test('a hello that was longer under way than that of a later link does not take its place', async () => {
    const address = await start();
    const token = await siteToken('harrowmere');
    const given = await ToySocket.open(address, token);
    if (!(given instanceof ToySocket)) throw new Error('refused');
    const newer = await toySite(address, token, 'harrowmere', MEANS.harrowmere);
    await until('the welcome', () => newer.received.length > 0);
    given.send(helloOf('harrowmere'));
    expect(await given.closed).toBe(CLOSE_CODES.replaced);
    await toySite(address, await siteToken('castlefen'), 'castlefen', MEANS.castlefen);
    expect((await follow(await submit())).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect(newer.socket.readyState).toBe(newer.socket.OPEN);
  });

  const spoil = (change: (gradient: Float64Array) => Float64Array) => (ask: Ask) => {
    const answer = toyAnswer(ask, MEANS.castlefen);
    const [work] = answer.work;
    if (work.work === 'evaluate')
      work.points[0].gradient = change(work.points[0].gradient ?? new Float64Array());
    return answer;
  };

  test.each<[string, (ask: Ask) => Answer, number]>([
    ['a vector of the wrong length', spoil(() => Float64Array.of(1, 2)), CLOSE_CODES.messageUnexpected],
    ['NaN', spoil(() => Float64Array.of(Number.NaN)), CLOSE_CODES.frameMalformed],
    [
      'another kind of answer',
      (ask) => ({ ...toyAnswer(ask, 0), work: [{ work: 'factor', factors: [Float64Array.of(1)] }] }),
      CLOSE_CODES.messageUnexpected,
    ],
  ])('%s closes the link; the run waits for an honest answer', async (_, reply, code) => {
    const address = await start();
    const token = await siteToken('castlefen');
    await toySite(address, await siteToken('harrowmere'), 'harrowmere', MEANS.harrowmere);
    const liar = await ToySocket.open(address, token);
    if (!(liar instanceof ToySocket)) throw new Error('refused');
    liar.answerWith(reply);
    liar.send(helloOf('castlefen'));
    const run = await submit();
    expect(await liar.closed).toBe(code);
    await toySite(address, token, 'castlefen', MEANS.castlefen);
    const events = (await follow(run)).map(({ event }) => event);
    expect(events.at(-1)).toMatchObject({ outcome: 'solved' });
    const rounds = events.filter((event) => event.event === 'round');
    expect(rounds.at(-1)?.objective).toBeCloseTo(0.45 * (1 - 0.3 ** TOY_ROUNDS), 12);
  });

  test('answers nobody asked for are dropped and the link stays', async () => {
    const address = await start();
    const [harrowmere] = await connectBoth(address);
    const work = [{ work: 'factor' as const, factors: [Float64Array.of(1)] }];
    const unasked = { kind: 'answer' as const, work };
    harrowmere.send({ ...unasked, work: [...unasked.work], run: 'none', ask: 1 });
    const run = await submit();
    harrowmere.send({ ...unasked, work: [...unasked.work], run, ask: 99 });
    expect((await follow(run)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect(harrowmere.socket.readyState).toBe(harrowmere.socket.OPEN);
  });
});
