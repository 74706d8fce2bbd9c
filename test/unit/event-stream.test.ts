import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { eventCutter } from '../../coordinator/commands/event-stream.js';

const cut = (...pieces: string[]) => {
  const cutter = eventCutter();
  return pieces.flatMap((piece) => cutter.push(piece));
};

describe('event stream', () => {
  test('data lines make an event at the empty line; comments and other fields are passed over', () => {
    expect(cut(': hello\n\nid: 3\nevent: x\nretry: 5\ndata: {"a":1}\ndata:b\n\n')).toEqual([
      { id: '3', data: '{"a":1}\nb' },
    ]);
  });

  test('an id holds for later events; an event that is not finished does not come', () => {
    expect(cut('id: 1\ndata: a\n\ndata: b\n\ndata: c\n')).toEqual([
      { id: '1', data: 'a' },
      { id: '1', data: 'b' },
    ]);
  });

  test('where the pieces are cut does not matter, for any line ending', () => {
    fc.assert(
      fc.property(
        fc.constantFrom('\n', '\r\n', '\r'),
        fc.array(fc.nat(60), { maxLength: 6 }),
        (end, cuts) => {
          const text = `id: 1${end}data: one${end}${end}: note${end}id: 2${end}data: two${end}data: more${end}${end}x${end}`;
          const places = [...new Set([0, ...cuts.filter((at) => at < text.length), text.length])].sort(
            (a, b) => a - b,
          );
          const pieces = places.slice(1).map((at, index) => text.slice(places[index], at));
          expect(cut(...pieces)).toEqual([
            { id: '1', data: 'one' },
            { id: '2', data: 'two\nmore' },
          ]);
        },
      ),
    );
  });

  test('a line that never ends is refused', () => {
    const cutter = eventCutter();
    const piece = 'x'.repeat(1_000_000);
    expect(() => {
      for (let at = 0; at < 9; at++) cutter.push(piece);
    }).toThrow(RangeError);
  });
});
