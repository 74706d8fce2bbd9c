import { plusScaled } from '../../numerics/vector.js';
import { measuredFactor, relativeTo } from './certificate.js';
import { ending } from './curvature-rung.js';
import type { LateDesk, Posting } from './late-desk.js';
import type { LateModels } from './late-models.js';
import { iterateAt, type LatePoint, latePoint } from './late-points.js';
import type { Taken } from './late-replies.js';
import { LateTrust, overshot } from './late-safeguard.js';
import { LateSettling } from './late-settling.js';
import { judge, unmeasuredEnd } from './late-verdict.js';
import { MatrixBudget } from './matrix-budget.js';
import type { Certificate, MethodEnd, Progress, Rung } from './method.js';
import type { ConsensusProblem } from './problem.js';
import type { Iterate } from './trial-points.js';

/** A step is cut to this share when the truth eats up the decrease promised; so often in a row at most. */
const CUT = 0.25;
const CUTS_MOST = 12;
/** Relative size of what counts as rounding in a measured objective. */
const ROUNDING = 1e-12;
/** Points measured by all that were worse than the best one, after which all are waited for. */
const STRIKES_MOST = 3;
/** Newton steps square the gap: a step whose square, so many times, is within the tolerance may be expected to certify. */
const SQUARE_FACTOR = 10;
/** Share of the tolerance within which the candidate stays where it is, for a certificate. */
const ENOUGH = 0.7;

/** Where the search for the minimiser of the sites' models stands: the candidate, and whom to ask what about it. */
export class LateSearch {
  /** The best point that all sites have measured. */
  best: Iterate | null = null;
  postings: readonly Posting<LatePoint>[] = [];
  private candidate: LatePoint;
  /** A site's joint problem knows no bounds: where there are any, the slow are asked as the others are. */
  private readonly joinable: boolean;
  /** Of the best point. */
  certificate: Certificate | null = null;
  private late: readonly number[] = [];
  private waitsForAll = false;
  /** What the last step promised, relative, with the certificate's factor. */
  private gap: number | null = null;
  private readonly settling = new LateSettling();
  private settled = false;
  /** The candidate that a slow site was asked about. */
  private settledAt: LatePoint | null = null;
  private unfactored = false;
  readonly budget: MatrixBudget;
  /** Whether a matrix is worth while at the candidate. */
  private certifying = true;
  private readonly trust: LateTrust;
  private cuts = 0;
  private strikes = 0;
  private purpose = 'curvature at the start';

  constructor(
    private readonly problem: ConsensusProblem,
    private readonly models: LateModels,
    private readonly desk: LateDesk<LatePoint>,
    private readonly rung: Rung,
  ) {
    this.budget = new MatrixBudget(problem.siteWeights.length, problem.curvatureMost);
    this.candidate = latePoint(problem, problem.start, null);
    this.trust = new LateTrust(problem);
    const { lower, upper } = problem.penalty;
    this.joinable = lower.every((bound) => bound === -Infinity) && upper.every((bound) => bound === Infinity);
    this.post();
  }

  barrier(): { readonly waitFor: readonly number[]; readonly late: readonly number[] } {
    const { answers } = this.candidate;
    const waitFor = [...answers.keys()].filter(
      (i) => this.waitsForAll || (this.lacks(i) && this.desk.isOld(i)),
    );
    return { waitFor, late: this.late };
  }

  /** Where to, if the step to the candidate is to be cut. */
  overshot(taken: readonly Taken[]): Float64Array | null {
    return overshot(this.candidate, this.models, this.best, taken);
  }

  /** Cuts the step to the candidate, begun at `to`; the models that foretold it stay. */
  shorten(to: Float64Array, taken: readonly Taken[]): void {
    for (const { site, about, model, joint } of taken)
      if (joint || about !== this.candidate || this.models.of(site) === null) this.models.learn(site, model);
    const cut = plusScaled(to, CUT, plusScaled(this.candidate.z, -1, to));
    const promised = this.models.value(to) - this.models.value(cut);
    this.candidate = latePoint(this.problem, cut, { z: to, promised });
    this.cuts++;
    this.trust.failed();
    this.settled = false;
    this.certifying = false;
    this.purpose = 'a shorter step';
  }

  /** The end, if a point that all have measured now is certified, or shows that there is no optimum. */
  judgeComplete(taken: readonly Taken[]): MethodEnd | null {
    for (const point of new Set(taken.map(({ about }) => about))) {
      const here = iterateAt(this.problem, point);
      if (here === null) continue;
      const judged = judge(this.problem, here, this.models.startDiagonal(), this.desk.rounds);
      if (judged.end !== null) return judged.end;
      const slack = ROUNDING * Math.abs(here.objective);
      if (this.best === null || here.objective <= this.best.objective + slack) {
        this.best = here;
        this.certificate = judged.certificate;
      } else this.strikes++;
    }
    return null;
  }

  misled(): boolean {
    return this.budget.spent || this.unfactored || this.cuts > CUTS_MOST || this.strikes >= STRIKES_MOST;
  }

  /** The next candidate: the minimiser of the models and g, or a slow site's own point. */
  advance(taken: readonly Taken[]): void {
    if (this.cuts === 0) this.trust.succeeded();
    this.cuts = 0;
    this.settled = false;
    if (this.tooFewHeard()) return;
    this.certifying = false;
    const slow = this.desk.slow();
    const solution = slow.length <= 1 ? taken.find(({ joint }) => joint) : undefined;
    if (solution !== undefined && this.adopt(solution)) return;
    const step = this.trust.step(this.models, this.candidate.z);
    if (step === null) {
      this.unfactored = true;
      return;
    }
    const promised = step.decrement / relativeTo(this.models.value(step.z));
    this.gap = measuredFactor(this.problem) * promised;
    const enough = this.gap <= ENOUGH * this.problem.tolerance;
    // while the one slow site works on the candidate, the candidate and the models it was sent stay
    const atRest =
      this.settledAt === this.candidate &&
      slow.length === 1 &&
      this.desk.owed(slow[0])?.note === this.candidate;
    const complete = this.candidate.answers.every((answer) => answer?.measured);
    if (complete || !(enough || atRest)) this.moveTo(step.z);
    const square = SQUARE_FACTOR * promised * promised <= this.problem.tolerance;
    this.settled = this.settling.hasSettled(promised, this.models.unheard().length > 0) || enough || square;
    this.certifying = (enough || square) && this.models.unheard().length === 0;
    this.purpose = enough ? 'certificate' : 'quadratic answers';
  }

  private moveTo(z: Float64Array): void {
    const promised = this.models.value(this.candidate.z) - this.models.value(z);
    this.candidate = latePoint(this.problem, z, { z: this.candidate.z, promised });
  }

  /** Makes a slow site's own point the next candidate, if the models agree: one round of the others completes it. */
  private adopt({ site, model }: Taken): boolean {
    if (!(this.models.value(model.point) < this.models.value(this.candidate.z))) return false;
    this.moveTo(model.point);
    this.candidate.answers[site] = model;
    this.settling.begin();
    this.certifying = this.candidate.answers.every((_, i) => i === site || this.budget.leftOf(i) > 1);
    this.purpose = 'quadratic answers at the solution of the slow';
    return true;
  }

  private tooFewHeard(): boolean {
    return 2 * this.models.unheard().length > this.problem.siteWeights.length;
  }

  /** Whom to ask what: the punctual about the candidate; the slow, once the others have settled, for a joint solution. */
  post(): void {
    const { desk } = this;
    const sites = [...this.candidate.answers.keys()];
    const open = sites.filter((i) => this.lacks(i));
    const slow = desk.slow();
    this.waitsForAll = slow.length > sites.length / 2 - 1;
    this.late = this.waitsForAll ? [] : slow;
    const idle = sites.every((i) => desk.owed(i) === null);
    const coming = sites.some((i) => !this.late.includes(i) && desk.owed(i) !== null);
    const wanted = this.tooFewHeard() && coming ? [] : open.filter((i) => this.isDue(i));
    const asked = wanted.length === 0 && idle ? open : wanted;
    this.postings = asked.map((site) => this.posting(site, this.late.includes(site) && this.mayJoin(site)));
    this.budget.take(this.postings);
    if (asked.some((i) => this.late.includes(i))) {
      this.settling.begin();
      this.settledAt = this.candidate;
    }
  }

  private lacks(site: number): boolean {
    const answer = this.candidate.answers[site];
    return answer === null || (this.certifying && !answer.measured);
  }

  private isDue(site: number): boolean {
    const owed = this.desk.owed(site);
    if (!this.late.includes(site)) return owed === null;
    if (owed === null && this.desk.isOld(site)) return true;
    const worthwhile = this.mayJoin(site) || this.worthMatrix() || this.models.of(site) === null;
    // a joint problem takes the place of an older question; nothing takes its own
    const free = owed === null || (owed.post.kind === 'evaluate' && owed.note !== this.candidate);
    return this.settled && worthwhile && free;
  }

  private posting(site: number, joint: boolean): Posting<LatePoint> {
    const { candidate: note, models } = this;
    if (joint) {
      this.purpose = 'joint problem for the slow';
      return { site, post: { kind: 'joint', start: note.z, ...models.others(site, note.z) }, note };
    }
    const want = this.worthMatrix() || models.of(site) === null ? 'curvature' : 'gradient';
    return { site, post: { kind: 'evaluate', point: note.z, want }, note };
  }

  /** A joint answer holds two matrices, and the certificate needs one more. */
  private mayJoin(site: number): boolean {
    return this.joinable && !this.tooFewHeard() && this.budget.leftOf(site) > 2;
  }

  private worthMatrix(): boolean {
    return this.certifying || this.budget.unlimited;
  }

  endUnsolved(): MethodEnd {
    const { problem, best, certificate, desk } = this;
    if (best !== null) return ending(problem, best, certificate, desk.rounds, 'round-limit', null);
    const { z } = this.candidate;
    return unmeasuredEnd(problem, z, this.models.value(z), desk.rounds);
  }

  progress(): Progress {
    return {
      rung: this.rung,
      purpose: this.purpose,
      primalResidual: null,
      dualResidual: null,
      relativeGap: this.gap,
      gapMeasured: false,
      objective: this.best?.objective ?? null,
    };
  }
}
