import { describe, expect, test } from 'vitest';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { inspectionOf, type PossibleDeparture } from '../../worker/commands/inspection.js';
import type { Policy, SiteFile } from '../../worker/custody/site-file.js';
import { buildRawShard } from '../../worker/design/build.js';
import { scaleShard } from '../../worker/design/scale.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import { OPEN_POLICY, SCALING, SITE, specification, TABLE } from '../support/worker-site.js';

const raw = (() => {
  const built = buildRawShard(specification(), TABLE);
  if (!built.ok) throw new Error(built.failure.message);
  return built.value;
})();

function departures(quorum: number | 'all', policy: Policy = OPEN_POLICY): readonly PossibleDeparture[] {
  const plain = specification();
  const spec = { ...plain, barrier: { ...plain.barrier, quorum } };
  const site: SiteFile = {
    site: SITE,
    coordinator: { url: 'wss://fit.example', tokenFile: 'token', caFile: null, pairFiles: null },
    table: { kind: 'csv', path: 'pipes.csv' },
    shard: { index: 1, of: 1 },
    policy,
    file: 'castlefen.site.yaml',
  };
  const file = { file: 'breaks.fit.yaml', specification: spec, digest: 'a'.repeat(64) };
  return inspectionOf(site, file, new Set(), raw).departures;
}

const late = (rows: readonly PossibleDeparture[]): PossibleDeparture[] =>
  rows.filter(({ times }) => times === 'where this site is late');

describe('what could leave a site that is late', () => {
  test('is listed where rounds may go on without it, with the numbers that its answer has', () => {
    expect(late(departures('all'))).toEqual([]);
    const zero = new Float64Array(3);
    const solver = localSolver(scaleShard(raw, SCALING, true), lossOf({ kind: 'poisson' }));
    const others = { curvature: Float64Array.of(1, 0, 1, 0, 0, 1), linear: zero };
    const joint = solver.joint(zero, others, zero, zero);
    if (!joint.ok) throw new Error(joint.failure.message);
    const numbers = numbersOfAnswer({ work: 'joint', problem: 0, ...joint.value });
    expect(late(departures(1))).toMatchObject([
      { numbers, kinds: ['proximal', 'gradients', 'curvature'], kept: null },
    ]);
  });

  test('needs two curvature matrices', () => {
    const kept = (curvatureMost: number): (string | null)[] =>
      late(departures(1, { ...OPEN_POLICY, curvatureMost })).map((row) => row.kept);
    expect([kept(1), kept(2)]).toEqual([['policy.curvature-most is 1'], [null]]);
  });
});
