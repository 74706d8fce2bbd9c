/** The panel against events that make no sense: members that are none, asks never made, a clock that goes back. */
import fc from 'fast-check';
import { expect, test } from 'vitest';
import { openPanel } from '../../coordinator/panel/member.js';
import { step, wakeAtMs } from '../../coordinator/panel/panel.js';
import type { PanelEvent, PanelState, Reply } from '../../coordinator/panel/panel-state.js';

const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'castlefen'];
const COUNT = SITES.length;

const anyone = fc.integer({ min: -1, max: COUNT + 1 });
const member = fc.nat({ max: COUNT - 1 });
const refusal = fc
  .constantFrom('memory-missing' as const, 'run-unknown' as const, 'policy-rows' as const)
  .map((code): Reply => ({ kind: 'refusal', run: 'r1', ask: 1, code, message: 'No.', remedy: null }));
const answer = fc.double({ noNaN: true }).map(
  (value): Reply => [
    {
      ...{ work: 'evaluate', problem: 0, ownFit: null, sketch: null },
      points: [{ value, gradient: null, diagonal: null, curvature: null }],
    },
  ],
);

/** What may come at any time, whoever sends it; `sinceMs` is added to the clock. */
const nonsense = fc.record({
  sinceMs: fc.oneof({ arbitrary: fc.nat({ max: 30 }), weight: 4 }, fc.integer({ min: -500, max: 5000 })),
  event: fc.oneof(
    fc.record({
      kind: fc.constant('reply' as const),
      member: anyone,
      ask: fc.integer({ min: -1, max: 9 }),
      reply: fc.oneof(answer, refusal),
    }),
    fc.record({ kind: fc.constant('lost' as const), member }),
    fc.record({ kind: fc.constant('connected' as const), member }),
    fc.record({ kind: fc.constant('gone' as const), member }),
    fc.record({ kind: fc.constant('time' as const) }),
  ),
  /** Asked next, where no barrier is closed. */
  asked: fc.subarray([...SITES.keys()]),
  quorum: fc.nat({ max: COUNT }),
});

/** Most effects of one event: of each member a reply dropped, an ask sent and being late, and two of the barrier. */
const EFFECTS_MOST = 3 * COUNT + 2;
/** Most times in a row that the panel may want the present instant again. */
const WAKES_MOST = 3;

test.each(['stop', 'go-without'] as const)('missing: %s', (missing) => {
  fc.assert(
    fc.property(fc.array(nonsense, { maxLength: 80 }), (all) => {
      let state: PanelState = openPanel(SITES, { deadlineMs: 15, patienceMs: 60, missing });
      const passed = new Set<number>();
      let ask = 0;
      let ended = false;
      const take = (event: PanelEvent): void => {
        const after = step(state, event);
        state = after.state;
        expect(after.effects.length).toBeLessThanOrEqual(EFFECTS_MOST);
        for (const effect of after.effects) {
          if (effect.kind === 'give-up') ended = true;
          if (effect.kind !== 'pass') continue;
          expect(passed).not.toContain(effect.ask);
          expect(effect.ask).toBe(ask);
          expect(effect.batch.replies).toHaveLength(COUNT);
          passed.add(effect.ask);
        }
      };
      let atMs = 1000;
      for (const { sinceMs, event, asked, quorum } of all) {
        if (ended) return;
        atMs += sinceMs;
        if (state.barrier === null) {
          ask += 1;
          take({ kind: 'ask', ask, asked, waitFor: asked, quorum, atMs });
        }
        take({ ...event, atMs });
        for (let wakes = 0; !ended; wakes++) {
          const wakeMs = wakeAtMs(state);
          expect(wakeMs === null || Number.isFinite(wakeMs)).toBe(true);
          if (wakeMs === null || wakeMs > atMs) break;
          expect(wakes).toBeLessThan(WAKES_MOST);
          take({ kind: 'time', atMs });
        }
      }
    }),
    { numRuns: 1000 },
  );
});
