import { describe, expect, test } from 'vitest';
import { bar } from '../../coordinator/report/round-line.js';
import { roundLog } from '../../coordinator/report/round-log.js';
import { timeLeftMs } from '../../coordinator/report/time-left.js';
import type { LogEvent, RoundEvent } from '../../coordinator/run/log-event.js';

const at = '2031-05-04T10:00:00.000Z';
const round = (number: number, more: Partial<RoundEvent> = {}): RoundEvent => ({
  event: 'round',
  stage: 'solve',
  round: number,
  roundsMost: 300,
  rung: 'proximal',
  purpose: 'proximal points',
  fitsOpen: 1,
  fitsTotal: 1,
  relativeGap: 10 ** -number,
  gapMeasured: false,
  tolerance: 1e-8,
  primalResidual: 1e-3,
  dualResidual: 1e-3,
  objective: 0.5,
  tookMs: 200,
  standIns: [],
  slowest: { site: 'lindell-bay', ms: 180 },
  numbersUp: 40,
  numbersDown: 40,
  at,
  ...more,
});

const LONG_SITE = 'the-regional-water-and-sewerage-board-of-upper-harrowmere-and-district';
const EVENTS: LogEvent[] = [
  {
    event: 'accepted',
    run: '4f6c2a91',
    title:
      'Pipe breaks per kilometre-year, all mains laid before the great renewal of the network, by material',
    digest: 'ab'.repeat(32),
    sites: ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'],
    at,
  },
  {
    event: 'accepted',
    run: '4f6c2a91',
    title: 'Pipe breaks',
    digest: 'ab'.repeat(32),
    sites: { least: 3 },
    at,
  },
  { event: 'waiting', sites: ['castlefen', 'oakhythe'], at },
  { event: 'waiting', sites: Array.from({ length: 60 }, (_, site) => `utility-${site}`), at },
  { event: 'site', site: LONG_SITE, change: 'connected', at },
  { event: 'site', site: LONG_SITE, change: 'lost', at },
  {
    event: 'without',
    round: 8,
    sites: [
      { site: LONG_SITE, rowsUsed: 120_456 },
      { site: 'oakhythe', rowsUsed: null },
    ],
    waitedMs: 1_800_000,
    at,
  },
  {
    event: 'survey',
    rowsTotal: 123_456,
    coefficients: 9,
    rung: 'proximal',
    rungReason: 'castlefen lets at most 3 curvature matrices leave, and Newton steps would need more',
    sites: [
      { site: 'harrowmere', rowsUsed: 3000, rowsDropped: 12 },
      { site: LONG_SITE, rowsUsed: 120_456, rowsDropped: 0 },
    ],
    notes: ['material=steel has no rows at castlefen'],
    tookMs: 412,
    at,
  },
  round(1),
  round(2, { slowest: { site: LONG_SITE, ms: 61_000 } }),
  round(3, { slowest: null, relativeGap: null, purpose: 'triangular factors' }),
  round(4, { fitsOpen: 13, fitsTotal: 100, relativeGap: 0.012, gapMeasured: true }),
  round(12_345, { relativeGap: 3.3e-11, gapMeasured: true, roundsMost: 100_000 }),
  round(5, { relativeGap: 0, gapMeasured: true }),
  round(6, { relativeGap: 1234.5 }),
  round(7, { purpose: 'gradient and diagonal curvature at the start', relativeGap: null }),
  {
    event: 'late',
    round: 4,
    sites: [LONG_SITE, 'oakhythe'],
    waitedMs: 30_000,
    patienceLeftMs: 1_740_000,
    at,
  },
  round(8, {
    standIns: [
      { site: LONG_SITE, round: 3 },
      { site: 'oakhythe', round: null },
    ],
  }),
  { event: 'resumed', round: 0, at },
  { event: 'resumed', round: 17, at },
  {
    event: 'outcome',
    outcome: 'solved',
    reason: null,
    rounds: 12,
    relativeGap: 3.1e-10,
    certificate: 'measured',
    without: [],
    folder: '/srv/commonfit-state/runs/4f6c2a91',
    at,
  },
  {
    event: 'outcome',
    outcome: 'site-missing',
    reason: 'castlefen did not answer for 30 minutes',
    rounds: 4,
    relativeGap: null,
    certificate: null,
    without: [],
    folder: '/srv/commonfit-state/runs/4f6c2a91',
    at,
  },
];

const linesAt = (width: number, events: readonly LogEvent[] = EVENTS, colour = false): string[] => {
  const log = roundLog({ width, colour, served: true });
  return events.flatMap((event) => log.linesFor(event));
};
const only = (event: LogEvent, width = 80): string => linesAt(width, [event]).join('\n');

describe('round log', () => {
  test.each([80, 60, 120, 100, 72, 40])('no line is wider than %i columns', (width) => {
    const tooWide = linesAt(width).filter((line) => [...line].length > width);
    expect(tooWide).toEqual([]);
  });

  test('a width below 40 is taken as 40', () => {
    expect(linesAt(5)).toEqual(linesAt(40));
  });

  test.each([60, 80, 120])('every round is one line that ends as a sentence at %i columns', (width) => {
    for (const event of EVENTS.filter((event) => event.event === 'round')) {
      const lines = linesAt(width, [{ ...event, standIns: [] }]);
      expect(lines).toHaveLength(1);
      expect(lines[0]).toMatch(/ Round \d+ (\(.+\) )?(is|gathered) .+\.$/);
    }
  });

  test('every other event ends its last line as a sentence, or names the specification, folder or run', () => {
    for (const event of EVENTS) {
      expect(linesAt(80, [event]).at(-1)).toMatch(
        /(\.|^Specification [0-9a-f]{16}|^The result folder.*|^\/srv.*)$/,
      );
    }
  });

  test('at 80 columns a round names its distance, the slowest site and its time', () => {
    expect(only(round(4))).toBe('     ◇·····┃ Round 4 is about 1e-4 off; lindell-bay last (0.18 s).');
  });

  test('with room it says in full what was gathered', () => {
    expect(only(round(4), 140)).toContain(
      'Round 4 (proximal points) is about 1e-4 off the optimum; lindell-bay answered last, after 0.18 s.',
    );
  });

  test('a measured gap is stated, a guessed one is `about`', () => {
    expect(only(round(4, { gapMeasured: true }))).toContain('◆');
    expect(only(round(4, { gapMeasured: true }))).toContain('is 1e-4 off');
    expect(only(round(4))).toContain('◇');
    expect(only(round(4))).toContain('is about 1e-4 off');
  });

  test('the open fits of a path are counted', () => {
    expect(only(round(4, { fitsOpen: 13, fitsTotal: 100 }))).toContain(
      'off, 13 fits open; lindell-bay last (0.18 s).',
    );
  });

  test('the time left stands at the end of a round that shows a trend', () => {
    expect(
      linesAt(
        80,
        [1, 2, 3, 4].map((number) => round(number, { tookMs: 2000 })),
      ).at(-1),
    ).toMatch(/; 8\.0 s left\.$/);
  });

  test('says who is late and what stands in, once for each answer that does', () => {
    const standIns = (number: number, ...late: RoundEvent['standIns']) =>
      round(number, { rung: 'curvature', standIns: late });
    const said = linesAt(80, [
      standIns(1, { site: 'castlefen', round: null }),
      standIns(2, { site: 'castlefen', round: null }),
      standIns(4, { site: 'castlefen', round: 3 }),
      standIns(5, { site: 'castlefen', round: 3 }),
      standIns(6),
      standIns(7, { site: 'castlefen', round: 3 }),
    ]).filter((line) => !line.includes(' Round '));
    expect(said).toEqual([
      'castlefen has not been heard: the others stand in for it.',
      'castlefen is late: its quadratic of round 3 stands in.',
      'castlefen is late: its quadratic of round 3 stands in.',
    ]);
    expect(only(round(5, { standIns: [{ site: 'castlefen', round: 3 }] }))).toContain(
      'its answer of round 3',
    );
  });

  test('says that it goes on without a site, and at the end that its rows are not in the fit', () => {
    const sites = [{ site: 'castlefen', rowsUsed: 1204 }];
    expect(only({ event: 'without', round: 4, sites, waitedMs: 1_800_000, at }).split('\n')).toEqual([
      'Going on without castlefen: it has not answered for 30 min; the fit begins again',
      '  from the survey, its 1,204 rows are not in it.',
    ]);
    const outcome = EVENTS.find((event) => event.event === 'outcome');
    if (outcome?.event !== 'outcome') throw new Error('no outcome');
    expect(only({ ...outcome, without: ['castlefen'] })).toContain('took 12 rounds, without castlefen.');
  });

  test('the names of long sites keep their head and tail', () => {
    const text = only(round(2, { slowest: { site: LONG_SITE, ms: 10 } }));
    expect(text).toMatch(/; the-\S+…\S+ict last \(0\.01 s\)\.$/);
  });

  test('without colour there is no escape sequence; with colour the same text is inside', () => {
    const plain = linesAt(80);
    const coloured = linesAt(80, EVENTS, true);
    const sequence = new RegExp(`${String.fromCharCode(27)}\\[[\\d;]*m`, 'g');
    expect(plain.join('\n')).not.toMatch(sequence);
    expect(coloured.join('\n')).toMatch(sequence);
    expect(coloured.map((line) => line.replace(sequence, ''))).toEqual(plain);
  });

  test('an arrival says how many are to come; a list that only got shorter is not said again', () => {
    const lines = linesAt(80, [
      { event: 'waiting', sites: ['castlefen', 'oakhythe', 'harrowmere'], at },
      { event: 'site', site: 'oakhythe', change: 'connected', at },
      { event: 'waiting', sites: ['castlefen', 'harrowmere'], at },
      { event: 'site', site: 'harrowmere', change: 'connected', at },
      { event: 'waiting', sites: ['castlefen'], at },
      { event: 'site', site: 'oakhythe', change: 'lost', at },
      { event: 'waiting', sites: ['castlefen', 'oakhythe'], at },
    ]);
    expect(lines).toEqual([
      'Waiting for castlefen, oakhythe and harrowmere to connect.',
      'oakhythe is here; 2 still to come.',
      'harrowmere is here; 1 still to come.',
      'The link to oakhythe is gone.',
      'Waiting for castlefen and oakhythe to connect.',
    ]);
  });

  test('a long wait for the same answers is said when it has doubled; round 0 is the survey', () => {
    const late = (round: number, waitedMs: number): LogEvent => ({
      event: 'late',
      round,
      sites: ['oakhythe'],
      waitedMs,
      patienceLeftMs: 300_000,
      at,
    });
    const waits = [30, 60, 90, 120, 150, 240].map((seconds) => late(0, seconds * 1000));
    const lines = linesAt(200, [...waits, late(1, 30_000)]);
    expect(lines.map((line) => /in (.*) after (.*);/.exec(line)?.slice(1))).toEqual([
      ['the survey', '30 s'],
      ['the survey', '60 s'],
      ['the survey', '2 min'],
      ['the survey', '4 min'],
      ['round 1', '30 s'],
    ]);
  });

  test('where the coordinator does not go on, nothing points at its folder', () => {
    const log = roundLog({ width: 80, colour: false, served: false });
    const text = EVENTS.flatMap((event) => log.linesFor(event)).join(' ');
    expect(text).not.toMatch(/result folder|commonfit result/);
  });

  test('the survey says rows, left-out rows, the rung and why', () => {
    const text = linesAt(
      200,
      EVENTS.filter(({ event }) => event === 'survey'),
    ).join('\n');
    expect(text).toContain('123,456 rows at 2 sites for 9 coefficients');
    expect(text).toContain('harrowmere 3,000 (left out: 12)');
    expect(text).toContain('The rung is proximal: castlefen lets at most 3 curvature matrices leave');
    expect(text).toContain('Note: material=steel has no rows at castlefen.');
  });

  test('the outcome says what was solved, the certificate in words and where the result is', () => {
    const text = linesAt(80).join('\n').replaceAll('\n', ' ');
    expect(text).toContain('Solved. “Pipe breaks” took 12 rounds over 123,456 rows at 2 sites.');
    expect(text).toContain('the objective is at most 3.1e-10 above the optimum (relative)');
    expect(text).toContain('/srv/commonfit-state/runs/4f6c2a91');
    expect(text).toContain('commonfit result 4f6c2a91');
    expect(text).toContain('Not solved: a site was missing');
    expect(text).toContain('castlefen did not answer for 30 minutes.');
  });
});

describe('bar', () => {
  test('the mark walks on a log scale from 1 to the tolerance', () => {
    const marks = [1, 1e-2, 1e-4, 1e-6].map((gap) => bar(gap, 1e-8, true, 9).indexOf('◆'));
    expect(marks).toEqual([0, 2, 4, 6]);
  });

  test('only a gap within the tolerance stands on the post', () => {
    expect(bar(1.01e-8, 1e-8, true, 12)).toBe(`${' '.repeat(10)}◆┃`);
    expect(bar(1e-8, 1e-8, true, 12)).toBe(`${' '.repeat(11)}◆`);
    expect(bar(0, 1e-8, true, 12)).toBe(`${' '.repeat(11)}◆`);
  });

  test('a gap above 1 stays at the start; no gap shows the post alone', () => {
    expect(bar(50, 1e-8, false, 6)).toBe('◇····┃');
    expect(bar(null, 1e-8, false, 6)).toBe('     ┃');
  });

  test('it has the same width for every gap, tolerances near 1 included', () => {
    for (const tolerance of [1e-12, 1e-8, 0.5, 0.999]) {
      for (let power = 3; power > -16; power--) {
        expect([...bar(3.3 * 10 ** power, tolerance, true, 12)]).toHaveLength(12);
      }
    }
  });
});

describe('time left', () => {
  const decades = (count: number): RoundEvent[] => Array.from({ length: count }, (_, at) => round(at + 1));
  const slow = (events: readonly RoundEvent[], more: Partial<RoundEvent> = {}): RoundEvent[] =>
    events.map((event) => ({ ...event, tookMs: 60_000, ...more }));

  test('a steady fall is carried on: a decade a round, 4 decades to go, 2 s a round', () => {
    expect(timeLeftMs(decades(4).map((event) => ({ ...event, tookMs: 2000 })))).toBeCloseTo(8000, 6);
  });

  test('one straggler among the rounds does not change it', () => {
    const events = decades(5).map((event, index) => ({ ...event, tookMs: index === 3 ? 90_000 : 2000 }));
    expect(timeLeftMs(events)).toBeCloseTo(6000, 6);
  });

  test('less than a second is not worth saying', () => {
    expect(timeLeftMs(decades(4))).toBeNull();
  });

  test('nothing is said of fewer than three rounds', () => {
    expect(timeLeftMs(slow(decades(2)))).toBeNull();
    expect(timeLeftMs([])).toBeNull();
  });

  test('nothing is said of a gap that does not fall, or only scatters', () => {
    expect(
      timeLeftMs([round(1), round(2), round(3)].map((event) => ({ ...event, relativeGap: 0.1 }))),
    ).toBeNull();
    const scattered = [1e-1, 1e-4, 1e-1, 1e-4, 1e-2, 1e-1].map((gap, at) =>
      round(at + 1, { relativeGap: gap }),
    );
    expect(timeLeftMs(slow(scattered))).toBeNull();
  });

  test('nothing is said where the rounds allowed would not suffice', () => {
    expect(timeLeftMs(slow(decades(4), { roundsMost: 6 }))).toBeNull();
  });

  test('rounds before the rung or the open fits changed do not count', () => {
    const events = [...decades(4), round(5, { rung: 'curvature' }), round(6, { rung: 'curvature' })];
    expect(timeLeftMs(slow(events))).toBeNull();
  });

  test('nothing is left to say within the tolerance', () => {
    expect(timeLeftMs(slow(decades(8)))).toBeNull();
  });
});
