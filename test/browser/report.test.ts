import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import type { Browser } from 'playwright-core';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { ReportInput } from '../../coordinator/report/page/input.js';
import { reportPage } from '../../coordinator/report/page/report-page.js';
import { expectAccessible, hasBrowser, openBrowser, openPage } from '../support/browser.js';
import { breaksReport, largeReport, pathReport } from '../support/report-fixture.js';

const INPUTS: readonly (readonly [string, ReportInput])[] = [
  ['whole', breaksReport()],
  ['path', pathReport()],
  [
    'not solved',
    breaksReport({ outcome: 'stalled', reason: 'no headway', comparison: null, fitQuality: null }),
  ],
];

/** A look at every page takes axe-core seconds: each width once, each scheme once. */
const LOOKS = [
  ['light', 1280],
  ['dark', 390],
] as const;

describe.skipIf(!hasBrowser)(
  'the report in a browser (skipped without /usr/bin/chromium)',
  { timeout: 90_000 },
  () => {
    let browser: Browser;
    let folder = '';

    const fileOf = async (name: string, input: ReportInput): Promise<string> => {
      const file = join(folder, `${name.replace(' ', '-')}.html`);
      await writeFile(file, reportPage(input));
      return `file://${file}`;
    };

    beforeAll(async () => {
      folder = await mkdtemp(join(tmpdir(), 'commonfit-report-'));
      browser = await openBrowser();
    });
    afterAll(async () => {
      await browser?.close();
      await rm(folder, { recursive: true, force: true });
    });

    test.each(INPUTS)(
      '%s: no violation, light and wide, dark and narrow; nothing on the console',
      async (name, input) => {
        const url = await fileOf(name, input);
        for (const [colorScheme, width] of LOOKS) {
          const viewport = { width, height: 900 };
          const { page, errors } = await openPage(browser, { colorScheme, viewport, bypassCSP: true });
          await page.goto(url);
          await expectAccessible(page);
          expect(errors).toEqual([]);
          expect(await page.evaluate('document.documentElement.scrollWidth')).toBeLessThanOrEqual(width);
          await page.context().close();
        }
      },
    );

    test('its own policy lets its style in: dark paper where dark is asked for, nothing refused', async () => {
      const { page, errors } = await openPage(browser, { colorScheme: 'dark' });
      await page.goto(await fileOf('whole', breaksReport()));
      expect(await page.evaluate('getComputedStyle(document.body).backgroundColor')).toBe('rgb(18, 24, 26)');
      expect(errors).toEqual([]);
      await page.context().close();
    });

    test('the keyboard reaches the content first, then the contents, in order', async () => {
      const { page } = await openPage(browser);
      await page.goto(await fileOf('whole', breaksReport()));
      const stops: string[] = [];
      for (let at = 0; at < 4; at++) {
        await page.keyboard.press('Tab');
        stops.push(String(await page.evaluate('document.activeElement.textContent')));
      }
      expect(stops).toEqual(['Go to the content', 'At a glance', 'The question', 'Who took part']);
      const headings = (await page.evaluate(
        "[...document.querySelectorAll('h1,h2,h3,h4')].map((one) => Number(one.tagName[1]))",
      )) as number[];
      expect(headings.filter((level, at) => at > 0 && level > headings[at - 1] + 1)).toEqual([]);
      await page.context().close();
    });

    test('on paper it is light, has its folded tables open, and a plausible number of A4 pages', async () => {
      const { page } = await openPage(browser, { colorScheme: 'dark' });
      await page.goto(await fileOf('whole', breaksReport()));
      const pdf = (await page.pdf({ preferCSSPageSize: true, printBackground: true })).toString('latin1');
      const pages = pdf.match(/\/Type\s*\/Page\b(?!s)/g)?.length ?? 0;
      expect(pages).toBeGreaterThanOrEqual(6);
      expect(pages).toBeLessThanOrEqual(14);
      expect(pdf).toMatch(/\/MediaBox\s*\[0 0 59[45]\.?\d* 84[12]/);
      await page.emulateMedia({ media: 'print', colorScheme: 'dark' });
      expect(await page.evaluate('getComputedStyle(document.body).backgroundColor')).toBe(
        'rgb(255, 255, 255)',
      );
      expect(
        await page.evaluate("document.querySelector('#rounds-table').getBoundingClientRect().height"),
      ).toBeGreaterThan(50);
      await page.context().close();
    });

    test('200 coefficients at 8 sites open in under a second', async () => {
      const { page } = await openPage(browser);
      const url = await fileOf('large', largeReport(200, 8));
      const loadsMs: number[] = [];
      // The quickest of three: other work on the machine only ever adds.
      for (let time = 0; time < 3; time++) {
        await page.goto('about:blank');
        await page.goto(url);
        loadsMs.push(
          Number(await page.evaluate("performance.getEntriesByType('navigation')[0].loadEventEnd")),
        );
      }
      expect(Math.min(...loadsMs)).toBeLessThan(1000);
      await page.context().close();
    });
  },
);
