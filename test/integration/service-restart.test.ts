import { stat } from 'node:fs/promises';
import { createServer } from 'node:net';
import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import { startService } from '../../coordinator/service/service.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import {
  analystToken,
  bench,
  call,
  connectBoth,
  expectRunSolved,
  follow,
  MEANS,
  SPECIFICATION,
  siteToken,
  start,
  submit,
} from '../support/service-bench.js';
import { TOY_ROUNDS, toyAnswer, toyRun } from '../support/toy-run.js';
import { helloOf, ToySocket, toySite } from '../support/toy-site.js';

describe('stopping and starting', () => {
  test('a run under way goes on after a restart, to the same result', async () => {
    await expectRunSolved(await start());
    const { runs } = (await (await call('/v1/runs')).json()) as { runs: { run: string }[] };
    const expected = await (await call(`/v1/runs/${runs[0].run}/result`)).text();

    const run = await submit();
    await follow(run);
    const stopped = await submit(SPECIFICATION.replace('castlefen]', 'castlefen, lindell-bay]'));
    await bench.service?.close();
    await start();
    expect(await (await call(`/v1/runs/${run}/result`)).text()).toBe(expected);
    expect(await (await call(`/v1/runs/${stopped}`)).json()).toMatchObject({ state: 'waiting' });
  });

  test('stopped in the middle of a round, the run is taken up from its journal', async () => {
    const address = await start();
    const token = await siteToken('castlefen');
    await toySite(address, await siteToken('harrowmere'), 'harrowmere', MEANS.harrowmere);
    const slow = await ToySocket.open(address, token);
    if (!(slow instanceof ToySocket)) throw new Error('refused');
    const reached = new Promise<void>((resolve) => {
      slow.answerWith((ask) => {
        if (ask.ask < 3) return toyAnswer(ask, MEANS.castlefen);
        resolve();
        return null;
      });
    });
    slow.send(helloOf('castlefen'));
    const run = await submit();
    await reached;
    await bench.service?.close();
    expect(await slow.closed).toBe(CLOSE_CODES.goingAway);

    await connectBoth(await start());
    const events = (await follow(run)).map(({ event }) => event);
    expect(events.filter(({ event }) => event === 'resumed')).toMatchObject([{ round: 2 }]);
    const rounds = events.filter((event) => event.event === 'round');
    expect(rounds.map(({ round }) => round)).toEqual([1, 2, 3]);
    expect(rounds.at(-1)?.objective).toBeCloseTo(0.45 * (1 - 0.3 ** TOY_ROUNDS), 12);
  });

  test('more runs than may wait are refused', async () => {
    await start({ waitingMost: 1 });
    await submit();
    const response = await call('/v1/runs', {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ specification: SPECIFICATION, file: 'x.fit.yaml' }),
    });
    expect(response.status).toBe(503);
    expect(await response.json()).toMatchObject({ code: 'coordinator-full' });
  });

  test('one run at a time: the second starts when the first has ended', async () => {
    const address = await start({ runningMost: 1 });
    const first = await submit();
    const second = await submit();
    await connectBoth(address);
    expect((await follow(first)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect((await follow(second)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
  });

  test('a port in use, plain text off loopback, and half a certificate are refused', async () => {
    const other = createServer();
    const port = await new Promise<number>((resolve) => {
      other.listen(0, '127.0.0.1', () => {
        const address = other.address();
        resolve(typeof address === 'object' && address !== null ? address.port : 0);
      });
    });
    const options = { state: bench.state, port, logLevel: 'silent' } as const;
    expect(await startService(options, { fit: toyRun })).toMatchObject({ failure: { code: 'port-in-use' } });
    other.close();
    const refused = { ok: false, failure: { code: 'field-conflict' } };
    expect(await startService({ ...options, host: '0.0.0.0' }, { fit: toyRun })).toMatchObject(refused);
    expect(await startService({ ...options, keyFile: 'key.pem' }, { fit: toyRun })).toMatchObject(refused);
  });

  test("the analyst's token is made once and is for its owner only", async () => {
    await start();
    const token = await analystToken();
    expect((await stat(join(bench.state, 'analyst.token'))).mode & 0o777).toBe(0o600);
    await bench.service?.close();
    await start();
    expect(await analystToken()).toBe(token);
  });
});
