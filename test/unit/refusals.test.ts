import { expect, test } from 'vitest';
import { refusalsOf } from '../../coordinator/run/refusals.js';
import type { Member } from '../../coordinator/run/run.js';
import type { Refusal, WorkAnswer } from '../../protocol/messages/round.js';

const member = (site: string, index = 1, of = 1): Member => ({
  site,
  shard: { index, of },
  kernel: 'typescript',
});
const roster = [member('harrowmere'), member('castlefen'), member('oakhythe', 2, 3)];
const answer: readonly WorkAnswer[] = [{ work: 'factor', factors: [new Float64Array(1)] }];
const refusal = (message: string, remedy: string | null): Refusal => ({
  ...{ kind: 'refusal', run: 'r1', ask: 3, code: 'policy-rows', message, remedy },
});

test('nobody refused, whether all have answered or not', () => {
  expect(refusalsOf([answer, answer, answer], roster)).toBeNull();
  expect(refusalsOf([answer, null, null], roster)).toBeNull();
});

test('one refusal, with its remedy and its code', () => {
  expect(refusalsOf([answer, refusal('Too few rows.', 'Lower rows-least.'), null], roster)).toEqual({
    outcome: 'refused',
    reason: 'site castlefen refused: Too few rows. Lower rows-least. [policy-rows]',
  });
});

test('all that refused, in roster order, those without a remedy too', () => {
  const replies = [refusal('Too few rows.', null), answer, refusal('The ledger is broken.', 'Put it aside.')];
  expect(refusalsOf(replies, roster)?.reason).toBe(
    'site harrowmere refused: Too few rows. [policy-rows]; ' +
      'site oakhythe#2 refused: The ledger is broken. Put it aside. [policy-rows]',
  );
});
