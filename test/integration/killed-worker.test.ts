import { afterAll, beforeAll, expect, test } from 'vitest';
import { SMALL_SITES, setSmallScenario } from '../support/small-scenario.js';
import { Stage } from '../support/stage.js';

let stage: Stage;
let undisturbed = '';

beforeAll(async () => {
  stage = await Stage.open('killed-worker');
  await setSmallScenario(stage, 600);
  for (const site of SMALL_SITES) stage.join(site);
  const { code, event, result } = await stage.submit('long.fit.yaml').outcome();
  console.log(event, result);
  expect(code).toBe(0);
  undisturbed = result;
});
afterAll(() => stage?.close());

test('x', async () => {
  const { code, event, result } = await stage.submit('long.fit.yaml').outcome();
  expect(result).toBe(undisturbed);
});
