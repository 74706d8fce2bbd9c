import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { fit as runOf } from '../../coordinator/run/fit.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import type { Batch, Member, RunAsk } from '../../coordinator/run/run.js';
import type { WorkAnswer } from '../../protocol/messages/round.js';
import type { Allowance } from '../../protocol/messages/survey.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { buildRawShard } from '../../worker/design/build.js';
import { tableRequest } from '../../worker/design/request.js';
import { scaleShard } from '../../worker/design/scale.js';
import type { RawShard } from '../../worker/design/shard.js';
import { surveyOf } from '../../worker/design/survey.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import { readTable } from '../../worker/source/read-table.js';
import { splitTable } from '../../worker/source/split.js';
import { answerLocally, must } from './method-driver.js';
import { parsedValue } from './specifications.js';

const SHARD = { index: 1, of: 1 };

/** A whole run over a table split by its column `site`, in this process: no link, no panel. `curvatureMost` null: no limit. */
export async function fitInProcess(
  text: string,
  table: string,
  curvatureMost: number | null,
): Promise<ResultDocument> {
  const spec = parsedValue(parseFitSpecification(text, 'case.fit.yaml'));
  if ('least' in spec.sites) throw new Error('name the sites');
  const loss = lossOf(spec.loss);
  const allowance: Allowance = {
    leave: ['counts', 'moments', 'proximal', 'gradients', 'curvature', 'sketches'],
    curvatureMost,
    numbersMost: null,
    roundsMost: null,
  };
  const raws = await rawShards(text, table, spec.sites);
  const roster: Member[] = spec.sites.map((site) => ({ site, shard: SHARD, kernel: 'here' }));
  let solvers: LocalSolver[] | null = null;
  const answer = ({ works, scaling }: RunAsk): Batch => {
    if (scaling !== null)
      solvers ??= raws.map((raw) => localSolver(scaleShard(raw, scaling, spec.intercept === 'shared'), loss));
    const replies = works.map((own, i) =>
      (own ?? []).map((work): WorkAnswer => {
        if (work.work === 'survey') return { work: 'survey', ...surveyOf(raws[i], loss), allowance };
        if (solvers === null) throw new Error('asked before the scaling was known');
        return answerLocally(work, solvers[i]);
      }),
    );
    return { replies, agesMs: works.map(() => 0), gone: [] };
  };
  const run = runOf(spec, digestOf(canonicalText(spec)), roster);
  for (let step = run.next(); ; ) {
    if (step.done) return step.value.result;
    step = run.next(answer(step.value));
  }
}

async function rawShards(text: string, table: string, sites: readonly string[]): Promise<RawShard[]> {
  const spec = parsedValue(parseFitSpecification(text, 'case.fit.yaml'));
  const folder = mkdtempSync(join(tmpdir(), 'commonfit-split-'));
  try {
    const parts = must(await splitTable({ table, by: 'site', folder }));
    const raws: RawShard[] = [];
    for (const site of sites) {
      const part = parts.find((one) => one.site === site);
      if (part === undefined) throw new Error(`the table has no rows of ${site}`);
      const file = { kind: 'csv', path: part.file } as const;
      raws.push(must(buildRawShard(spec, must(await readTable(file, tableRequest(spec, SHARD))))));
    }
    return raws;
  } finally {
    rmSync(folder, { recursive: true, force: true });
  }
}
