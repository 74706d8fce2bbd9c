import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { openPanel } from '../../coordinator/panel/member.js';
import { step, wakeAtMs } from '../../coordinator/panel/panel.js';
import type { PanelEvent, PanelSettings, PanelState, Reply } from '../../coordinator/panel/panel-state.js';
import { NaivePanel, type Passed } from '../support/naive-panel.js';

/** The last site has two members. */
const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'castlefen'];
const COUNT = SITES.length;
const subset = fc.subarray([...SITES.keys()]);

/** What happens next: some time passes, a reply comes; and what is asked, should nothing be open. */
const happening = fc.record({
  passMs: fc.nat({ max: 5 }),
  member: fc.nat({ max: COUNT - 1 }),
  which: fc.oneof(
    { arbitrary: fc.constant('newest' as const), weight: 6 },
    { arbitrary: fc.constantFrom('older' as const, 'later' as const, null), weight: 3 },
  ),
  link: fc.constantFrom('connected' as const, 'lost' as const, null),
  asked: subset,
  waitFor: fc.oneof(subset, fc.constant<number[]>([])),
  quorum: fc.nat({ max: COUNT }),
});

const reply = (value: number): Reply => [
  {
    work: 'evaluate',
    problem: 0,
    points: [{ value, gradient: null, diagonal: null, curvature: null }],
    ownFit: null,
    sketch: null,
  },
];

/** The panel with a clock: it is woken when it asks for it and at no other time. */
class ClockedPanel {
  state: PanelState;
  passed: Passed | 'given up' | null = null;
  readonly sentTo = new Map<number, number>();

  constructor(settings: PanelSettings) {
    this.state = openPanel(SITES, settings);
  }

  take(event: PanelEvent): void {
    const after = step(this.state, event);
    this.state = after.state;
    if (event.kind === 'connected' || event.kind === 'lost') this.sentTo.delete(event.member);
    for (const effect of after.effects) {
      if (effect.kind === 'pass') this.passed = { atMs: event.atMs, batch: effect.batch };
      if (effect.kind === 'give-up') this.passed = 'given up';
      if (effect.kind === 'send') this.sentTo.set(effect.member, effect.ask);
    }
  }

  wake(atMs: number): void {
    const due = wakeAtMs(this.state);
    if (due !== null && due <= atMs) this.take({ kind: 'time', atMs });
  }
}

describe('the barrier of the panel and its rules read literally', () => {
  test.each(['stop', 'go-without'] as const)('agree at every millisecond, missing: %s', (missing) => {
    fc.assert(
      fc.property(
        fc.array(happening, { maxLength: 60 }),
        fc.integer({ min: 20, max: 200 }),
        (all, patienceMs) => {
          const settings = { deadlineMs: 15, patienceMs, missing };
          const panel = new ClockedPanel(settings);
          const naive = new NaivePanel(SITES, settings);
          const newest = SITES.map(() => 0);
          let ask = 0;
          let atMs = 0;
          for (const [index, next] of all.entries()) {
            if (naive.barrier === null) {
              const asked = next.asked.filter((member) => !naive.gone[member]);
              const waitFor = next.waitFor.filter(
                (m) => asked.includes(m) || naive.owes[m] !== null || naive.came[m] !== null,
              );
              ask += 1;
              for (const member of asked) newest[member] = ask;
              naive.ask(ask, asked, waitFor, next.quorum, atMs);
              panel.take({ kind: 'ask', ask, asked, waitFor, quorum: next.quorum, atMs });
            }
            if (next.link !== null) panel.take({ kind: next.link, member: next.member, atMs });
            if (next.which !== null) {
              const { member } = next;
              const to = newest[member] + { newest: 0, older: -1, later: 1 }[next.which];
              naive.reply(member, to, newest[member], reply(index), atMs);
              panel.take({ kind: 'reply', member, ask: to, reply: reply(index), atMs });
            }
            for (const untilMs = atMs + next.passMs; ; atMs++) {
              panel.wake(atMs);
              expect(panel.passed).toEqual(naive.at(atMs));
              if (panel.passed === 'given up') return;
              panel.passed = null;
              if (atMs >= untilMs) break;
            }
            for (const [member, { connected, open }] of panel.state.members.entries()) {
              expect(open?.ask ?? null).toBe(naive.owes[member]?.ask ?? null);
              // whoever owes a reply has been sent the ask on its present connection
              if (connected && open !== null) expect(panel.sentTo.get(member)).toBe(open.ask);
            }
          }
        },
      ),
    );
  });
});
