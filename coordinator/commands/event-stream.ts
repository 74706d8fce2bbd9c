/** One event of a `text/event-stream` (HTML Living Standard, section 9.2): its data and the last id seen so far. */
export interface StreamEvent {
  readonly id: string | null;
  readonly data: string;
}

/** Longest event accepted, in characters. */
const EVENT_MOST = 8_000_000;

/** Cuts the text of an event stream into events, in whatever pieces it arrives. */
export function eventCutter(): { push(piece: string): StreamEvent[] } {
  let rest = '';
  let id: string | null = null;
  let data: string[] = [];
  const take = (line: string, events: StreamEvent[]): void => {
    if (line === '') {
      if (data.length > 0) events.push({ id, data: data.join('\n') });
      data = [];
      return;
    }
    const colon = line.indexOf(':');
    const field = colon < 0 ? line : line.slice(0, colon);
    const value = colon < 0 ? '' : line.slice(colon + 1).replace(/^ /, '');
    if (field === 'data') data.push(value);
    if (field === 'id' && !value.includes('\u0000')) id = value;
  };
  return {
    push: (piece) => {
      const events: StreamEvent[] = [];
      rest += piece;
      if (rest.length > EVENT_MOST) throw new RangeError('event longer than any the coordinator writes');
      // A lone CR at the end may be the first half of CR LF: it waits for the next piece.
      const lines = rest.split(/\r\n|\n|\r(?!$)/);
      rest = lines.pop() ?? '';
      for (const line of lines) take(line, events);
      return events;
    },
  };
}
