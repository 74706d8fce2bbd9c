import type { Browser } from 'playwright-core';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { expectAccessible, hasBrowser, openBrowser, openPage } from '../support/browser.js';
import { analystToken, connectBoth, start, submit } from '../support/service-bench.js';

describe.skipIf(!hasBrowser)(
  'the coordinator in a browser (skipped without /usr/bin/chromium)',
  { timeout: 90_000 },
  () => {
    let browser: Browser;
    beforeAll(async () => {
      browser = await openBrowser();
    });
    afterAll(async () => {
      await browser?.close();
    });

    test('one signs in, follows a run to its end, and reads its report', async () => {
      const address = await start();
      const run = await submit();
      const { page, errors } = await openPage(browser, { bypassCSP: true });
      await page.goto(`${address}/runs/${run}`);
      expect(page.url()).toBe(`${address}/sign-in?to=%2Fruns%2F${run}`);
      await expectAccessible(page);
      await page.getByRole('textbox', { name: 'Token' }).fill(await analystToken());
      await page.getByRole('button', { name: 'Sign in' }).click();
      await page.waitForURL(`${address}/runs/${run}`);
      await page.getByText('Waiting for harrowmere, castlefen.').waitFor();
      await connectBoth(address);
      const report = page.getByRole('link', { name: 'Read the report' });
      await report.waitFor();
      expect(await page.locator('#state').textContent()).toBe('ended as solved');
      expect(await page.locator('#status').textContent()).toMatch(/^Solved after \d+ rounds\./);
      expect(await page.locator('#rounds tr').count()).toBeGreaterThan(0);
      await expectAccessible(page);
      await report.click();
      await page.waitForURL(`${address}/runs/${run}/report`);
      expect(await page.locator('h1').textContent()).toBe('Mean pressure');
      await page.goto(`${address}/`);
      await expectAccessible(page);
      expect(await page.locator('#runs-table tbody tr').count()).toBe(1);
      await page.getByRole('button', { name: 'Sign out' }).click();
      await page.goto(`${address}/runs/${run}/report`);
      expect(page.url()).toContain('/sign-in');
      expect(errors).toEqual([]);
      await page.context().close();
    });

    test('its policy lets its own script and style in and refuses nothing of it', async () => {
      const address = await start();
      const run = await submit();
      const { page, errors } = await openPage(browser);
      await page.goto(`${address}/sign-in?to=/runs/${run}`);
      await page.getByRole('textbox', { name: 'Token' }).fill(await analystToken());
      await page.getByRole('button', { name: 'Sign in' }).click();
      await page.getByText('Waiting for harrowmere, castlefen.').waitFor();
      await connectBoth(address);
      await page.getByRole('link', { name: 'Read the report' }).click();
      await page.waitForURL(/report$/);
      expect(
        await page.evaluate('getComputedStyle(document.querySelector(".verdict")).borderLeftStyle'),
      ).not.toBe('none');
      expect(errors).toEqual([]);
      await page.context().close();
    });
  },
);
