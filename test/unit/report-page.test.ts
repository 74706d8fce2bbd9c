import { describe, expect, test } from 'vitest';
import { reportPage } from '../../coordinator/report/page/report-page.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { breaksReport, largeReport, pathReport } from '../support/report-fixture.js';

const textOf = (page: string): string =>
  page
    .replace(/<style>[\s\S]*?<\/style>/g, '')
    .replace(/<[^>]*>/g, ' ')
    .replace(/\s+/g, ' ');
const headOf = (page: string): string => textOf(page.slice(0, page.indexOf('id="question"')));

describe('the report page', () => {
  test('answers at its head whether to trust it, what it says, whether sites agree and what left', () => {
    const head = headOf(reportPage(breaksReport()));
    expect(head).toContain('Solved.');
    expect(head).toContain('at most 3.1e−12 above the least possible');
    expect(head).toContain('within the tolerance of 1e−8');
    expect(head).toMatch(/material=cast-iron : rate ratio 2\.49 \(2\.21 to 2\.82\)/);
    expect(head).toContain('The sites differ in soil=clay');
    expect(head).toContain('1,184 to 1,274 numbers from each site, the most from castlefen');
  });

  test('has its parts in the order in which they are read', () => {
    const page = reportPage(pathReport());
    const ids = [...page.matchAll(/<section id="([a-z-]+)"/g)].map(([, id]) => id);
    expect(ids).toEqual([
      ...['verdict', 'question', 'sites', 'findings', 'coefficients', 'convergence', 'path', 'comparison'],
      ...['quality', 'certificate', 'left', 'cautions', 'audit'],
    ]);
  });

  test('is one file: no script, nothing loaded from elsewhere, a policy that allows neither', () => {
    const page = reportPage(breaksReport());
    expect(page).not.toMatch(/<script|<iframe|<img|@import|url\(|https?:|style="/);
    expect(page).toMatch(
      /Content-Security-Policy" content="default-src &#39;none&#39;; style-src &#39;sha256-/,
    );
  });

  test('is the same to the last byte for the same input', () => {
    expect(reportPage(pathReport())).toBe(reportPage(pathReport()));
  });

  test.each([
    ['every part', breaksReport()],
    ['a path', pathReport()],
    ['200 coefficients', largeReport(200, 8)],
  ])('%s: no number that is none, no missing value, every id once', (_, input) => {
    const page = reportPage(input);
    expect(page).not.toMatch(/NaN|undefined|Infinity|\bnull\b|\[object|⚠/);
    const ids = [...page.matchAll(/ id="([^"]+)"/g)].map(([, id]) => id);
    expect(ids.filter((id, at) => ids.indexOf(id) !== at)).toEqual([]);
    const named = [...page.matchAll(/aria-(?:labelledby|describedby)="([^"]+)"/g)].map(([, id]) => id);
    expect(named.filter((id) => !ids.includes(id))).toEqual([]);
  });

  test('not a number in the result is said to be absent and drawn nowhere', () => {
    const whole = breaksReport();
    const broken = JSON.parse(JSON.stringify(whole.result), (key, value) =>
      ['estimate', 'lower', 'i2', 'observed', 'deviance'].includes(key) ? Number.NaN : value,
    );
    const page = reportPage({ ...whole, result: broken });
    expect(page).not.toMatch(/NaN|Infinity/);
    expect(page).toContain('not available');
  });

  test('names, titles, reasons and notes are text, whatever is in them', () => {
    const nasty = `<img src=x onerror="alert(1)">&amp;'</title></svg>`;
    const swapped = JSON.parse(
      JSON.stringify(pathReport())
        .replaceAll('castlefen', JSON.stringify(nasty).slice(1, -1))
        .replaceAll('soil=clay', JSON.stringify(`soil=${nasty}`).slice(1, -1)),
    );
    const page = reportPage({
      ...swapped,
      specification: { ...swapped.specification, title: nasty },
      run: nasty,
      node: nasty,
      journal: { file: nasty, sha256: nasty },
      result: {
        ...swapped.result,
        title: nasty,
        notes: [nasty],
        omitted: [{ part: nasty, reason: nasty }],
        rungReason: nasty,
        software: nasty,
        specification: nasty,
      },
    });
    expect(page).not.toContain('<img');
    expect(page).not.toContain('onerror="alert');
    expect(page.match(/<\/title>/g)?.length).toBe(page.match(/<title/g)?.length);
    expect(page.match(/<\/svg>/g)?.length).toBe(page.match(/<svg/g)?.length);
  });

  test('200 coefficients at 8 sites stay under 2 MB, and pictures say what they leave out', () => {
    const page = reportPage(largeReport(200, 8));
    expect(Buffer.byteLength(page)).toBeLessThan(2_000_000);
    expect(page).toContain('The 60 of 200 coefficients that are largest in standard errors');
    expect(page).toContain('The 12 of 201 coefficients in which the sites differ most');
    expect(
      page.match(/<tr><th scope="row">district=water-supply-district-137<\/th>/g)?.length,
    ).toBeGreaterThan(1);
  });
});

describe('what is not only of the fit itself', () => {
  test('what moved since the run it started from, the most first', () => {
    const moved = {
      age_years: { before: 0.02, after: 0.0183, change: -0.0017, changeInStandardErrors: -1.5 },
      'soil=clay': { before: 0.31, after: 0.318, change: 0.008, changeInStandardErrors: 0.18 },
    };
    const startedFrom = {
      run: '20310401-080000-00aa11bb',
      coefficients: { age_years: 0.02, 'soil=clay': 0.31, 'soil=peat': 0.2 },
      used: true,
    };
    const text = textOf(reportPage(breaksReport({ startedFrom, moved })));
    expect(text).toContain('What moved since the earlier run');
    expect(text.indexOf('0.02000 0.01830 −0.0017 −1.5')).toBeGreaterThan(0);
    expect(text.indexOf('0.3100 0.3180 +0.0080 0.18')).toBeGreaterThan(text.indexOf('0.02000 0.01830'));
    expect(text).toContain('No longer here: soil=peat.');
  });

  test('rounds of the stages after the fit are in the table and not in the picture of its distance', () => {
    const input = breaksReport();
    const last = input.events.findLast((event) => event.event === 'round');
    if (last?.event !== 'round') throw new Error('the fixture has rounds');
    const after = { ...last, round: 7, stage: 'describe' as const, purpose: 'refits', relativeGap: 0.5 };
    const page = reportPage({ ...input, events: [...input.events, after] });
    expect(textOf(page)).toContain('7 refits');
    expect(page).toContain('falls to 3.1e-12 in round 6');
  });
});

describe('what is not in it', () => {
  const headWith = (parts: Partial<ResultDocument>): string => headOf(reportPage(breaksReport(parts)));

  test('every part left out is named with its reason', () => {
    const omitted = [
      { part: 'site estimates', reason: 'oakhythe lets no site-estimates leave' },
      { part: 'profile intervals', reason: 'a penalised fit has no profile likelihood' },
      { part: 'calibration', reason: 'harrowmere lets no residual-bins leave' },
    ];
    const head = headWith({ omitted, comparison: null });
    for (const { part, reason } of omitted) expect(head).toContain(`${part} (${reason})`);
  });

  test('a site gone on without is named in the heading, with its rows', () => {
    const head = headWith({ without: [{ site: 'oakhythe', rowsUsed: 4118 }] });
    expect(head).toContain('Solved, without oakhythe.');
    expect(head).toContain('oakhythe, which was given up on, with its 4,118 rows');
  });

  test('a certificate outside the tolerance is the first thing said', () => {
    const whole = breaksReport();
    const [fit] = whole.result.fits;
    const certificate = { kind: 'measured', gap: 0.02, relativeGap: 0.09, kkt: 0.3 } as const;
    const head = headWith({ fits: [{ ...fit, certificate }] });
    expect(head).toContain('The certificate failed');
    expect(head).toContain('not within the tolerance');
    expect(head).toContain('Nothing that may be relied on.');
  });

  test('a fit without a certificate, and one with an estimate only, are not called sound', () => {
    const [fit] = breaksReport().result.fits;
    expect(headWith({ fits: [{ ...fit, certificate: null }] })).toContain('The certificate failed');
    const certificate = { kind: 'estimate', gap: 1e-13, relativeGap: 1e-12, kkt: 1e-9 } as const;
    const head = headWith({ fits: [{ ...fit, certificate }] });
    expect(head).toContain('probably right, and not proven to be');
    expect(head).not.toContain('Sound');
  });

  test('a run that did not end solved says so, and why, before anything else', () => {
    const head = headWith({ outcome: 'round-limit', reason: 'the gap was still above the tolerance' });
    expect(head).toContain('Not solved: the rounds allowed were used up.');
    expect(head).toContain('the gap was still above the tolerance');
    expect(head).toContain('Do not rely on any number below');
  });

  test('a run cancelled before any site answered has a page too', () => {
    const input = breaksReport({
      outcome: 'cancelled',
      reason: 'Cancelled by the analyst.',
      sites: [],
      rowsTotal: null,
      rung: null,
      rungReason: null,
      fits: [],
      chosen: null,
      inference: null,
      comparison: null,
      fitQuality: null,
      numbersSent: [],
      notes: [],
      rounds: 0,
    });
    const text = textOf(reportPage({ ...input, events: [] }));
    expect(text).toContain('Not solved: the run was cancelled.');
    expect(text).not.toMatch(/undefined|NaN/);
  });
});
