import type { FitDocument, ResultDocument } from '../../coordinator/run/result.js';
import type { Cluster, ClusterPlan, RunPlan } from './cluster.js';
import { checkRun, type Ending } from './invariants.js';
import type { Lasting } from './lasting.js';
import { plainRun } from './plan.js';
import type { StoredRun } from './sim-coordinator.js';
import { undisturbed } from './undisturbed.js';

/** Compares an ended run with the same run undisturbed, as far as the lasting fault allows. Its outcome. */
export async function judge(
  cluster: Cluster,
  plan: ClusterPlan,
  run: RunPlan,
  stored: StoredRun,
  lasting: Lasting | null,
): Promise<string> {
  if (stored.log.at(-1)?.event !== 'outcome') {
    const quiet = Math.round(cluster.quietAtMs);
    cluster.violated(`${stored.run} has not ended although nothing is wrong since ${quiet} ms`);
    return 'open';
  }
  const ending = await checkRun(cluster, stored);
  if (ending === null) return 'inconsistent';
  const fault = await faultOf(ending, plan, run, stored.run, lasting);
  if (fault !== null) cluster.violated(`${stored.run} ${fault}`);
  const { outcome, without } = ending.result;
  const stoodIn = stored.log.some((event) => event.event === 'round' && event.standIns.length > 0);
  return `${outcome}${stoodIn ? ', with stand-ins' : ''}${without.length > 0 ? ', without a site' : ''}`;
}

async function faultOf(
  ending: Ending,
  plan: ClusterPlan,
  run: RunPlan,
  id: string,
  lasting: Lasting | null,
): Promise<string | null> {
  const { result } = ending;
  const touched = lasting !== null && isAbout(lasting, id, run, result);
  if (touched && allowed(lasting, result.outcome, result.reason)) return null;
  if (result.without.length > 0 && !(touched && isRidOf(lasting, result)))
    return `went on without ${result.without.map(({ site }) => site).join(', ')}`;
  const expected = await undisturbed(plan, plainRun(run, sitesOf(run, result)));
  const synchronous = run.quorum === null && run.least === null && result.without.length === 0;
  if (!synchronous) return sameOptimum(result, expected);
  if (withoutDigest(ending.text) !== withoutDigest(expected.text))
    return `ended otherwise than undisturbed: ${result.outcome}, ${result.reason}`;
  const sameAnswers = ending.answers === expected.answers || lasting?.kind === 'refuses';
  return sameAnswers ? null : 'has the same result from other answers';
}

/** The text of a result but for the digest, which tells patience and what is done about a missing site. */
const withoutDigest = (text: string): string => text.replace(/"specification": "[0-9a-f]{64}"/, '');

/** The sites whose rows are in the fit, in the order in which the specification names them. */
function sitesOf(run: RunPlan, { sites }: ResultDocument): string[] {
  const names = new Set(sites.map(({ site }) => site.split('#')[0]));
  if (names.size === 0) return [...run.sites];
  return run.least === null ? run.sites.filter((site) => names.has(site)) : [...names];
}

/** How far two certified objectives may be apart, as a multiple of the tolerance: what is off on either side, and an estimate's error. */
const APART = 10;
const COEFFICIENT_TOLERANCE = 5e-3;

/** A run that did not hear all sites in every round ends like the one that did, within the tolerance; how not, or null. */
export function sameOptimum(result: ResultDocument, { result: expected }: Ending): string | null {
  if (result.outcome !== expected.outcome)
    return `ended as ${result.outcome} (${result.reason}), undisturbed as ${expected.outcome}`;
  for (const [index, own] of result.fits.entries()) {
    const apart = apartness(own, expected.fits[index], result.tolerance);
    if (apart !== null) return `fit ${index + 1}: ${apart}`;
  }
  return null;
}

function apartness(own: FitDocument, other: FitDocument, tolerance: number): string | null {
  const difference = own.objective - other.objective;
  if (Math.abs(difference) > APART * tolerance * Math.abs(other.objective))
    return `the objective is ${difference} off the undisturbed one of ${other.objective}`;
  for (const [name, value] of Object.entries(other.coefficients)) {
    const apart = Math.abs(own.coefficients[name] - value);
    if (!(apart <= COEFFICIENT_TOLERANCE * (1 + Math.abs(value)))) return `${name} is ${apart} off ${value}`;
  }
  return null;
}

const isAbout = (
  lasting: Lasting,
  id: string,
  { sites, least }: RunPlan,
  result: ResultDocument,
): boolean => {
  if (lasting.kind === 'cancelled') return lasting.run === id;
  const { site } = lasting.worker;
  const inRoster = result.sites.some((one) => one.site.split('#')[0] === site);
  return least === null ? sites.includes(site) : inRoster || isRidOf(lasting, result);
};

const isRidOf = (lasting: Lasting, { without }: ResultDocument): boolean =>
  (lasting.kind === 'gone' || lasting.kind === 'liar') &&
  without.every(({ site }) => site.split('#')[0] === lasting.worker.site);

/** A run that cannot be done says so, and who it is about. */
function allowed(lasting: Lasting, outcome: string, reason: string | null): boolean {
  if (lasting.kind === 'cancelled') return outcome === 'cancelled';
  const named = reason?.includes(lasting.worker.name) ?? false;
  const refuses = lasting.kind === 'refuses' || lasting.kind === 'full ledger';
  return named && outcome === (refuses ? 'refused' : 'site-missing');
}
