import { describe, expect, test } from 'vitest';
import { EXIT, exitCodeOf, exitCodeTable } from '../../coordinator/commands/exit-codes.js';

const OUTCOMES = [
  'solved',
  'round-limit',
  'time-limit',
  'stalled',
  'site-missing',
  'refused',
  'infeasible',
  'unbounded',
  'cancelled',
  'broken',
];

describe('exit codes', () => {
  test('0 is solved alone, every other outcome has a code of its own', () => {
    expect(OUTCOMES.map((outcome) => exitCodeOf(outcome, []))).toEqual([
      0, 10, 11, 12, 13, 14, 15, 16, 17, 18,
    ]);
  });

  test('no outcome shares a code with another kind of ending', () => {
    const others = Object.values(EXIT).filter((code) => code !== EXIT.ok);
    expect(
      OUTCOMES.map((outcome) => exitCodeOf(outcome, [])).filter((code) =>
        others.some((other) => other === code),
      ),
    ).toEqual([]);
  });

  test('an outcome that is not known is not taken for success, names of object members included', () => {
    for (const outcome of ['', 'finished', 'toString', '__proto__']) expect(exitCodeOf(outcome, [])).toBe(18);
  });

  test('solved without a site is not taken for solved; no other outcome changes by it', () => {
    expect(OUTCOMES.map((outcome) => exitCodeOf(outcome, ['castlefen']))).toEqual([
      19, 10, 11, 12, 13, 14, 15, 16, 17, 18,
    ]);
  });

  test('the table of a command has its codes in order, outcomes where asked', () => {
    expect(exitCodeTable([EXIT.ok, EXIT.usage], false).split('\n')).toEqual([
      '    0  done; of a run: solved',
      '    2  the command line is wrong',
    ]);
    const codes = exitCodeTable([EXIT.ok, EXIT.interrupted], true)
      .split('\n')
      .map((line) => Number(line.trim().split(' ')[0]));
    expect(codes).toEqual([0, 10, 11, 12, 13, 14, 15, 16, 17, 18, 19, 130]);
  });
});
