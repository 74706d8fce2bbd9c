import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { fit as runOf } from '../../coordinator/run/fit.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import type { Batch, Member, RunAsk } from '../../coordinator/run/run.js';
import type { StartFrom } from '../../coordinator/run/start-from.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import { type Allowance, LEAVE_KINDS } from '../../protocol/messages/survey.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { FilledWork } from '../../worker/custody/content.js';
import { buildRawShard } from '../../worker/design/build.js';
import { tableRequest } from '../../worker/design/request.js';
import type { RawShard } from '../../worker/design/shard.js';
import { lastOf } from '../../worker/local/local-solver.js';
import { type SiteSolvers, siteSolvers } from '../../worker/local/site-solvers.js';
import { lossOf } from '../../worker/losses/index.js';
import { answerSteps } from '../../worker/service/compute.js';
import { readTable } from '../../worker/source/read-table.js';
import { splitTable } from '../../worker/source/split.js';
import { must } from './method-driver.js';
import { parsedValue } from './specifications.js';

const SHARD = { index: 1, of: 1 };

/** The sites of a run in this process, their rows a table split by its column `site`: no link, no panel. */
export interface SitesInProcess {
  readonly spec: FitSpecification;
  readonly roster: readonly Member[];
  answer(asked: RunAsk): Batch;
}

/** A whole run in this process. `curvatureMost` null: no limit. */
export async function fitInProcess(
  text: string,
  table: string,
  curvatureMost: number | null,
  startFrom: StartFrom | null = null,
): Promise<ResultDocument> {
  return fitOn(await sitesInProcess(text, table, curvatureMost), startFrom);
}

/** A whole run among these sites, which may have more than one. */
export function fitOn({ spec, roster, answer }: SitesInProcess, startFrom: StartFrom | null): ResultDocument {
  const run = runOf(spec, digestOf(canonicalText(spec)), roster, startFrom);
  for (let step = run.next(); ; ) {
    if (step.done) return step.value.result;
    step = run.next(answer(step.value));
  }
}

export async function sitesInProcess(
  text: string,
  table: string,
  curvatureMost: number | null,
): Promise<SitesInProcess> {
  const spec = parsedValue(parseFitSpecification(text, 'case.fit.yaml'));
  if ('least' in spec.sites) throw new Error('name the sites');
  return sitesOn(spec, await rawShards(text, table, spec.sites), curvatureMost);
}

/** Sites with these rows, in the order of the specification. */
export function sitesOn(
  spec: FitSpecification,
  raws: readonly RawShard[],
  curvatureMost: number | null,
): SitesInProcess {
  if ('least' in spec.sites) throw new Error('name the sites');
  const loss = lossOf(spec.loss);
  const allowance: Allowance = {
    leave: [...LEAVE_KINDS],
    curvatureMost,
    numbersMost: null,
    roundsMost: null,
  };
  const roster: Member[] = spec.sites.map((site) => ({ site, shard: SHARD, kernel: 'here' }));
  let solvers: SiteSolvers[] | null = null;
  const answer = ({ works, scaling }: RunAsk): Batch => {
    if (scaling !== null) solvers ??= raws.map((raw) => siteSolvers(spec, raw, scaling));
    const replies = works.map((own, i) =>
      (own ?? []).map((work): WorkAnswer => {
        const means = { raw: raws[i], loss, solvers: solvers?.[i] ?? null, allowance };
        return must(lastOf(answerSteps(filled(work), means)));
      }),
    );
    return { replies, agesMs: works.map(() => 0), gone: [] };
  };
  return { spec, roster, answer };
}

/** An ask in this process leaves nothing out. */
function filled(work: Work): FilledWork {
  if (work.work !== 'proximal') return work;
  const problems = work.problems.map(({ problem, part, center, scale, diagonal, start }) => {
    if (diagonal === null || start === null) throw new Error('a full ask leaves nothing out');
    return { problem, part, center, scale, diagonal, start };
  });
  return { work: 'proximal', problems };
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
