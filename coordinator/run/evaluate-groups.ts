import { LIMITS } from '../../protocol/limits.js';
import type { EvaluateAnswer, Want } from '../../protocol/messages/evaluate.js';
import type { Part } from '../../protocol/messages/part.js';
import type { Work } from '../../protocol/messages/round.js';
import type { MethodAsk, SiteEvaluation } from '../consensus/method.js';

/** What a method asks of some points; its progress is no part of it. */
export type EvaluateAsk = Omit<Extract<MethodAsk, { kind: 'evaluate' }>, 'progress' | 'kind'>;

/** Rows and sites that a problem is about. */
export interface Scope {
  readonly part: Part;
  /** Members, by index in roster order. */
  readonly sites: readonly number[];
}

const WANTS: readonly Want[] = ['value', 'gradient', 'diagonal', 'curvature'];

/**
 * The evaluate asks of many problems as few work items: problems about the same rows share one, in which each distinct
 * point stands once (φ, ∇φ and H do not depend on the penalty).
 */
export class EvaluateGroups {
  private readonly groups: Group[] = [];

  add(problem: number, scope: Scope, ask: EvaluateAsk): void {
    const group = this.groups.find((one) => one.takes(scope, ask)) ?? this.open(problem, scope);
    group.add(problem, ask);
  }

  /** What member `site` is asked. */
  works(site: number): Work[] {
    return this.groups.filter(({ scope }) => scope.sites.includes(site)).map((group) => group.work());
  }

  /** Per problem: its sites' evaluations in roster order, from each member's evaluate answers in the order of `works`. */
  split(answers: readonly (readonly EvaluateAnswer[])[]): Map<number, SiteEvaluation[]> {
    const out = new Map<number, SiteEvaluation[]>();
    const next = answers.map(() => 0);
    for (const group of this.groups) {
      const own = group.scope.sites.map((site) => answers[site][next[site]++]);
      for (const { problem, at, ownFit } of group.takers) {
        const sites = own.map((answer) => ({
          points: at.map((k) => answer.points[k]),
          ownFit: ownFit ? answer.ownFit : null,
          sketch: answer.sketch,
        }));
        out.set(problem, sites);
      }
    }
    return out;
  }

  private open(problem: number, scope: Scope): Group {
    const group = new Group(problem, scope);
    this.groups.push(group);
    return group;
  }
}

class Group {
  readonly takers: { readonly problem: number; readonly at: readonly number[]; readonly ownFit: boolean }[] =
    [];
  private readonly points: { readonly point: Float64Array; want: Want }[] = [];
  private readonly places = new Map<string, number>();
  /** Points that have a place in `places`: a problem that stays alone needs none. */
  private keyed = 0;
  private ownFit: { readonly at: number; readonly hold: number } | null = null;
  private sketch: EvaluateAsk['sketch'] = null;

  constructor(
    private readonly problem: number,
    readonly scope: Scope,
  ) {}

  /** Sketches stand alone; own fits are shared where they are of the same point. */
  takes({ part, sites }: Scope, ask: EvaluateAsk): boolean {
    if (ask.sketch !== null || this.sketch !== null) return false;
    if (part?.fold !== this.scope.part?.fold || part?.side !== this.scope.part?.side) return false;
    if (sites.length !== this.scope.sites.length || sites.some((site, k) => site !== this.scope.sites[k]))
      return false;
    if (this.points.length + ask.points.length > LIMITS.batchMost) return false;
    if (ask.ownFit === null || this.ownFit === null) return true;
    const place = this.placeOf(ask.points[ask.ownFit.at].point);
    return place === this.ownFit.at && ask.ownFit.hold === this.ownFit.hold;
  }

  add(problem: number, ask: EvaluateAsk): void {
    const at = ask.points.map(({ point, want }) => this.place(point, want));
    if (ask.ownFit !== null) this.ownFit = { at: at[ask.ownFit.at], hold: ask.ownFit.hold };
    if (ask.sketch !== null) this.sketch = { ...ask.sketch, at: at[ask.sketch.at] };
    this.takers.push({ problem, at, ownFit: ask.ownFit !== null });
  }

  work(): Work {
    const { problem, scope, ownFit, sketch } = this;
    const points = this.points.map(({ point, want }) => ({ point, want }));
    return { work: 'evaluate', problem, part: scope.part, points, ownFit, sketch };
  }

  private place(point: Float64Array, want: Want): number {
    const found = this.takers.length === 0 ? undefined : this.placeOf(point);
    if (found === undefined) return this.points.push({ point, want }) - 1;
    const known = this.points[found];
    if (WANTS.indexOf(want) > WANTS.indexOf(known.want)) known.want = want;
    return found;
  }

  /** Where an equal point stands. Keys are long where there are many columns, and are made when they are asked for. */
  private placeOf(point: Float64Array): number | undefined {
    for (; this.keyed < this.points.length; this.keyed++) {
      const key = keyOf(this.points[this.keyed].point);
      if (!this.places.has(key)) this.places.set(key, this.keyed);
    }
    return this.places.get(keyOf(point));
  }
}

const keyOf = (point: Float64Array): string => point.join(',');
