import { existsSync, readFileSync } from 'node:fs';
import { createRequire } from 'node:module';
import { type Browser, type BrowserContextOptions, chromium, type Page } from 'playwright-core';
import { expect } from 'vitest';

const CHROMIUM = '/usr/bin/chromium';

/** Tests in a browser are skipped where Debian's Chromium is not installed. */
export const hasBrowser = existsSync(CHROMIUM);

export const openBrowser = (): Promise<Browser> =>
  chromium.launch({
    executablePath: CHROMIUM,
    args: [
      '--headless',
      '--no-sandbox',
      '--disable-gpu',
      '--disable-quic',
      '--no-first-run',
      '--disable-background-networking',
      '--disable-component-update',
      '--disable-sync',
    ],
  });

export interface Opened {
  readonly page: Page;
  /** Errors of the console and uncaught ones, as they come. */
  readonly errors: string[];
}

export async function openPage(browser: Browser, options: BrowserContextOptions = {}): Promise<Opened> {
  const context = await browser.newContext(options);
  const page = await context.newPage();
  const errors: string[] = [];
  page.on('console', (message) => {
    if (message.type() === 'error' || message.type() === 'warning') errors.push(message.text());
  });
  page.on('pageerror', (error) => errors.push(error.message));
  return { page, errors };
}

const axe = readFileSync(createRequire(import.meta.url).resolve('axe-core/axe.min.js'), 'utf8');

/** What axe-core finds wrong, rule by rule. The policy of the page must be bypassed for it to be put in. */
export async function expectAccessible(page: Page): Promise<void> {
  await page.addScriptTag({ content: axe });
  const violations = await page.evaluate(`axe.run(document).then(({ violations }) =>
    violations.map(({ id, nodes }) => id + ': ' + nodes.map(({ html }) => html.slice(0, 200)).join(' | ')))`);
  expect(violations).toEqual([]);
}
