import { afterAll, beforeAll, beforeEach, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import { until } from '../support/processes.js';
import { frameHead, RawSocket } from '../support/raw-socket.js';
import { setSmallScenario } from '../support/small-scenario.js';
import { type Following, PATIENT, Stage } from '../support/stage.js';
import { helloOf, ToySocket } from '../support/toy-site.js';

/**
 * A coordinator in its own process with a fit under way, held in the middle of a round, and what comes to its port
 * meanwhile. How each misdeed by itself is answered is tested with the service in `service-*.test.ts`; here the fit
 * beside it has to come out with the same bits.
 */
const SITES = ['harrowmere', 'castlefen'];

let stage: Stage;
let undisturbed = '';
let following: Following;
let run = '';
const tokens: Record<string, string> = {};

beforeAll(async () => {
  stage = await Stage.open('service-abuse');
  await setSmallScenario(stage, 1500, SITES);
  await stage.admit('saltmarsh');
  for (const name of [...SITES, 'saltmarsh']) tokens[name] = (await stage.read(`${name}.token`)).trim();
  tokens.analyst = (await stage.read('state/analyst.token')).trim();
  for (const site of SITES) stage.join(site);
  undisturbed = (await stage.submit('long.fit.yaml').outcome()).result;
}, PATIENT.timeout);
afterAll(() => stage?.close());

beforeEach(async () => {
  following = stage.submit('long.fit.yaml');
  run = await following.run();
  await stage.holdAt(following, 5, 'castlefen');
});

async function expectUndisturbed(): Promise<void> {
  const { code, event, result } = await following.outcome();
  expect(event).toMatchObject({ outcome: 'solved' });
  expect(code).toBe(0);
  expect(result).toBe(undisturbed);
}

async function socketOf(site: string): Promise<ToySocket> {
  const opened = await ToySocket.open(stage.address, tokens[site]);
  if (!(opened instanceof ToySocket)) throw new Error(`refused with ${opened.status}`);
  return opened;
}

/** What a greeted socket receives. */
async function greeted(site: string): Promise<ToySocket> {
  const socket = await socketOf(site);
  socket.send(helloOf(site));
  await until('a welcome', () => socket.received.some(({ kind }) => kind === 'welcome'));
  return socket;
}

const answerOf = (ask: Pick<Ask, 'run' | 'ask'>, point: Float64Array): Answer => ({
  kind: 'answer',
  run: ask.run,
  ask: ask.ask,
  work: [{ work: 'proximal', problems: [{ problem: 0, point, newtonSteps: 1 }] }],
});

test('strangers at the port are turned away; the fit does not notice', async () => {
  const refused = async (token: string, subprotocol?: string): Promise<unknown> => {
    const opened = await ToySocket.open(stage.address, token, subprotocol);
    return opened instanceof ToySocket ? 'let in' : opened.status;
  };
  expect(await refused('nobody')).toBe(401);
  expect(await refused(tokens.analyst)).toBe(401);
  expect(await refused(tokens.saltmarsh, 'commonfit.v9')).toBe(426);

  const noHttp = await RawSocket.open(stage.address);
  noHttp.write(Buffer.from(Array.from({ length: 4096 }, (_, i) => (i * 151) % 256)));
  await until('the end of a connection that is no HTTP', () => noHttp.ended);
  expect(noHttp.received.toString('latin1')).toMatch(/^(HTTP\/1\.1 400|$)/);

  // a header for each megabyte that never comes
  const promise = await RawSocket.upgraded(stage.address, tokens.saltmarsh);
  promise.write(frameHead(1n << 40n));
  expect(await promise.closeCode()).toBe(CLOSE_CODES.frameTooLarge);

  const noCbor = await greeted('saltmarsh');
  noCbor.socket.send(Buffer.from([0xbf, 0xbf, 0xbf]));
  expect(await noCbor.closed).toBe(CLOSE_CODES.frameMalformed);

  const impostor = await socketOf('saltmarsh');
  impostor.send(helloOf('castlefen'));
  expect(await impostor.closed).toBe(CLOSE_CODES.tokenRefused);

  // connections that say nothing
  const mute = await Promise.all(
    Array.from({ length: 50 }, () => RawSocket.upgraded(stage.address, tokens.saltmarsh)),
  );
  stage.workerOf('castlefen').signal('SIGCONT');
  await expectUndisturbed();
  expect(mute.every(({ ended }) => !ended)).toBe(true);
  for (const { socket } of mute) socket.destroy();
});

test('a site that is not in the run cannot answer for one that is', async () => {
  const outsider = await greeted('saltmarsh');
  for (let ask = 1; ask <= 60; ask++) outsider.send(answerOf({ run, ask }, new Float64Array(10).fill(9)));
  outsider.send({ kind: 'refusal', run, ask: 7, code: 'policy-column', message: 'no', remedy: null });
  stage.workerOf('castlefen').signal('SIGCONT');
  await expectUndisturbed();
  expect(outsider.received.map(({ kind }) => kind)).toEqual(['welcome']);
  expect(outsider.socket.readyState).toBe(outsider.socket.OPEN);
  outsider.socket.close();
});

test('a member that answers wrongly is cut off each time, and asked again where it is honest', async () => {
  await stage.workerOf('castlefen').kill();
  const lies: [(ask: Ask) => Answer, number][] = [
    [(ask) => answerOf(ask, Float64Array.of(1, 2)), CLOSE_CODES.messageUnexpected],
    [(ask) => answerOf(ask, new Float64Array(10).fill(Number.NaN)), CLOSE_CODES.frameMalformed],
    [
      (ask) => ({
        ...answerOf(ask, new Float64Array(10)),
        work: [{ work: 'factor', factors: [new Float64Array(66)] }],
      }),
      CLOSE_CODES.messageUnexpected,
    ],
  ];
  for (const [lie, code] of lies) {
    const liar = await greeted('castlefen');
    liar.answerWith((ask) => (ask.run === run ? lie(ask) : null));
    expect(await liar.closed).toBe(code);
  }
  const early = await greeted('castlefen');
  early.answerWith((ask) => answerOf({ run, ask: ask.ask + 1 }, new Float64Array(10).fill(3)));
  await until('an ask', () => early.received.some(({ kind }) => kind === 'ask'));
  await until('the notice of an answer nobody asked for', () =>
    stage.coordinator?.stderr.includes('"code":"answer-unasked"'),
  );
  expect(early.socket.readyState).toBe(early.socket.OPEN);
  early.socket.close();
  await early.closed;
  stage.join('castlefen');
  await expectUndisturbed();
  for (const code of ['dimension-wrong', 'answer-unasked']) expect(stage.coordinator?.stderr).toContain(code);
});
