import { unpackSymmetric } from '../../numerics/packed.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Chosen } from './choose.js';
import { comparisonOf } from './compare.js';
import { type DescribePlan, describeWorks, planOf } from './describe-works.js';
import { columnsOf, type Description, type MemberQuadratic, pooledCurvature } from './description.js';
import { type Described, NOT_DESCRIBED } from './documents.js';
import { qualityOf } from './fit-quality.js';
import { inferenceOf } from './infer.js';
import type { Grounds } from './problems.js';
import type { OmittedPart } from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Solved } from './solve.js';
import type { Stop } from './survey.js';

/**
 * Stage five: what the specification's report asks about the fit that the run stands by. One ask brings what the sites
 * let leave; refits follow together. What cannot be had is left out, with the reason.
 */
export function* describe(
  grounds: Grounds,
  rounds: Rounds,
  solved: Solved,
  chosen: Chosen,
): Generator<RunAsk, Described | Stop, Batch> {
  const { report } = grounds.specification;
  const asked = Object.values(report).some((part) => (Array.isArray(part) ? part.length > 0 : part));
  if (!asked) return NOT_DESCRIBED;
  const omitted: OmittedPart[] = [];
  const end = chosen.fit === null ? null : solved.ends[chosen.fit];
  if (chosen.fit === null || end === null || end.outcome !== 'solved') {
    const reason =
      end === null
        ? 'several fits and no choice between them: add `choose` to the specification'
        : 'the fit did not end solved';
    return { ...NOT_DESCRIBED, omitted: [{ part: 'report', reason }] };
  }
  const plan = planOf(grounds, rounds.newProblems(1), solved, end);
  omitted.push(...plan.omitted);
  const description = yield* askMembers(grounds, rounds, solved, chosen.fit, plan);
  if (isStop(description)) return description;
  const inference = report.covariance ? yield* inferenceOf(grounds, rounds, description, omitted) : null;
  if (inference !== null && isStop(inference)) return inference;
  const comparison = report.compareSites ? yield* comparisonOf(grounds, rounds, description, omitted) : null;
  if (comparison !== null && isStop(comparison)) return comparison;
  const fitQuality = report.fitQuality ? qualityOf(grounds, description, chosen, omitted) : null;
  return { inference, comparison, fitQuality, omitted };
}

function* askMembers(
  grounds: Grounds,
  rounds: Rounds,
  solved: Solved,
  fit: number,
  plan: DescribePlan,
): Generator<RunAsk, Description | Stop, Batch> {
  const works = describeWorks(grounds, plan);
  let answers: readonly (readonly WorkAnswer[])[] = grounds.roster.map(() => []);
  if (works.some((own) => own.length > 0)) {
    const came = yield* rounds.askOnce('describe', 'what the report asks', works);
    if (isStop(came)) return came;
    answers = came;
  }
  const { end } = plan;
  const members = quadraticsOf(plan, answers);
  return {
    fit,
    end,
    lambdas: solved.lambdas[fit],
    columns: columnsOf(grounds.frame),
    members,
    curvature: pooledCurvature(members, end),
    scores: everyMember(answers, 'scores'),
    siteFits: plan.siteFits.some((leaves) => leaves)
      ? answers.map((own) => own.find((one) => one.work === 'site-fit') ?? null)
      : null,
    margins: everyMember(answers, 'margins'),
    quality: everyMember(answers, 'quality'),
    first: solved.first,
    nullLoss: nullLossOf(plan, answers),
  };
}

/** Per member what it answered at the fit; on the pooled rung, what its factor holds. */
function quadraticsOf(
  { end, fromFactors, quadratics }: DescribePlan,
  answers: readonly (readonly WorkAnswer[])[],
): MemberQuadratic[] | null {
  if (fromFactors !== null)
    return fromFactors.map((model) => ({
      value: model.value(end.z),
      gradient: model.gradient(end.z),
      curvature: model.gram(),
    }));
  if (!quadratics) return null;
  return answers.map((own) => {
    const at = own.find((one) => one.work === 'evaluate')?.points[0];
    if (at === undefined || at.gradient === null || at.curvature === null)
      throw new TypeError('the panel passed an answer without its curvature');
    return { value: at.value, gradient: at.gradient, curvature: unpackSymmetric(at.curvature) };
  });
}

/** The loss of the intercept-only fit; null where it was not asked. */
function nullLossOf(
  { nullPoint, fromFactors }: DescribePlan,
  answers: readonly (readonly WorkAnswer[])[],
): number | null {
  if (nullPoint === null) return null;
  if (fromFactors !== null) return fromFactors.reduce((sum, model) => sum + model.value(nullPoint), 0);
  return answers.reduce(
    (sum, own) => sum + (own.find((one) => one.work === 'evaluate')?.points.at(-1)?.value ?? Number.NaN),
    0,
  );
}

type Kind = Work['work'];

/** Every member's answer of one kind; null where one was not asked. */
function everyMember<K extends Kind>(
  answers: readonly (readonly WorkAnswer[])[],
  kind: K,
): Extract<WorkAnswer, { work: K }>[] | null {
  const found = answers.flatMap((own) =>
    own.filter((one): one is Extract<WorkAnswer, { work: K }> => one.work === kind),
  );
  return found.length === answers.length ? found : null;
}
