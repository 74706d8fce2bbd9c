import { describe, expect, test } from 'vitest';
import type { Notice } from '../../coordinator/service/host-parts.js';
import { plainLine, runLines } from '../../coordinator/service/operational-log.js';

const RUN = '20310504-101500-4f6c2a91';
const time = new Date(2031, 4, 4, 10, 15).getTime();
const line = (fields: object): string => plainLine(JSON.stringify({ level: 30, time, ...fields }));

describe('a line of the plain log', () => {
  test('has the time, the run where there is one, the sentence and its code', () => {
    expect(line({ msg: 'Ready.' })).toBe('10:15:00  Ready.\n');
    expect(line({ level: 40, run: RUN, msg: 'It is late.', code: 'site-missing' })).toBe(
      '10:15:00  warn  4f6c2a91  It is late. [site-missing]\n',
    );
  });

  test('names a site that the sentence does not', () => {
    expect(line({ site: 'castlefen', msg: 'A link closed.' })).toBe('10:15:00  castlefen: A link closed.\n');
    expect(line({ site: 'castlefen', msg: 'castlefen connected.' })).toBe('10:15:00  castlefen connected.\n');
  });
});

describe('what the log tells of a run', () => {
  const told = (...events: Parameters<ReturnType<typeof runLines>>[1][]): Notice[] => {
    const notices: Notice[] = [];
    const tell = runLines((notice) => notices.push(notice));
    for (const event of events) tell(RUN, event);
    return notices;
  };
  const at = '2031-05-04T10:15:00.000Z';

  test('every line is of its run; what needs somebody is a warning', () => {
    const late = {
      event: 'late',
      round: 3,
      sites: ['castlefen'],
      waitedMs: 30_000,
      patienceLeftMs: 60_000,
      at,
    } as const;
    const accepted = {
      event: 'accepted',
      run: RUN,
      title: 'Breaks',
      digest: 'ab',
      sites: ['castlefen'],
      at,
    } as const;
    const notices = told(accepted, late);
    expect(notices.every(({ run, message }) => run === RUN && message !== '')).toBe(true);
    expect(
      notices
        .filter(({ level }) => level === 'warn')
        .map(({ message }) => message)
        .join(),
    ).toContain('castlefen');
    expect(notices[0]).toMatchObject({ level: 'info' });
  });

  test('a site that comes or goes is told once, by the hub', () => {
    expect(told({ event: 'site', site: 'castlefen', change: 'lost', at })).toEqual([]);
  });
});
