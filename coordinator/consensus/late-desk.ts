import type { LateAnswers, LateAsk, LateBarrier, SitePost, SiteReply, StandIn } from './late-method.js';
import type { Progress } from './method.js';
import { SlowSites } from './slow-sites.js';

/** A reply with the post that it answers, and what the method noted beside the post. */
export interface Arrival<Note> {
  readonly site: number;
  readonly post: SitePost;
  readonly note: Note;
  readonly reply: SiteReply;
}

/** What one site is asked; the note comes back with its reply. */
export interface Posting<Note> {
  readonly site: number;
  readonly post: SitePost;
  readonly note: Note;
}

/**
 * Keeps what each site owes, how old its newest answer is, and who is slow. A site owes the answer to the newest thing
 * it was asked, until it comes.
 */
export class LateDesk<Note> {
  private readonly open: (Posting<Note> | null)[];
  /** Round of each site's newest answer; null before the first. */
  private readonly heardIn: (number | null)[];
  private readonly times: SlowSites;

  /** Asks made. */
  rounds = 0;

  constructor(private readonly barrier: LateBarrier) {
    this.open = barrier.agesMs.map(() => null);
    this.heardIn = barrier.agesMs.map(() => null);
    this.times = new SlowSites(barrier.agesMs);
  }

  /** In roster order. */
  sites(): number[] {
    return [...this.open.keys()];
  }

  /** What the site was asked and has not answered. */
  owed(site: number): Posting<Note> | null {
    return this.open[site];
  }

  /** Sites much slower than the others, and those not heard yet though others have been. */
  slow(): number[] {
    const slow = this.times.slow();
    return this.sites().filter(
      (i) => slow.includes(i) || (this.rounds > 0 && this.heardIn[i] === null && this.open[i] !== null),
    );
  }

  /** Whether the site's newest answer has reached the greatest age at which it may stand in. */
  isOld(site: number): boolean {
    return this.rounds - (this.heardIn[site] ?? 0) >= this.barrier.oldest;
  }

  /**
   * One round. The barrier does not open before all of `waitFor` that owe an answer have given it, nor, where
   * anything is asked of sites not in `late`, before the quorum of those.
   */
  *ask(
    postings: readonly Posting<Note>[],
    { waitFor, late }: { readonly waitFor: readonly number[]; readonly late: readonly number[] },
    progress: Progress,
  ): Generator<LateAsk, readonly Arrival<Note>[], LateAnswers> {
    const sites = this.sites();
    // an answer that was due has not come: an older one stands in for it
    const due = sites.filter((i) => this.open[i] !== null);
    const owedBefore = due.some((i) => !late.includes(i));
    for (const posting of postings) this.open[posting.site] = posting;
    const punctual = postings.filter(({ site }) => !late.includes(site)).length;
    this.rounds++;
    const answers = yield {
      posts: sites.map((i) => postings.find(({ site }) => site === i)?.post ?? null),
      waitFor: sites.filter((i) => waitFor.includes(i) && this.open[i] !== null),
      quorum: punctual === 0 && !owedBefore ? 1 : Math.min(punctual, this.barrier.quorum),
      progress,
      standIns: due.map((site): StandIn => ({ site, round: this.heardIn[site] })),
    };
    return sites.flatMap((i) => this.arrived(i, answers));
  }

  private arrived(site: number, { replies, agesMs }: LateAnswers): Arrival<Note>[] {
    const reply = replies[site];
    const posting = this.open[site];
    if (posting === null) return [];
    if (reply === null) {
      this.times.owes(site, agesMs[site]);
      return [];
    }
    this.open[site] = null;
    this.heardIn[site] = this.rounds;
    this.times.answered(site, agesMs[site]);
    return [{ ...posting, reply }];
  }
}
