import { closeSync, fdatasyncSync, fstatSync, ftruncateSync, openSync, readSync, writeSync } from 'node:fs';
import { open } from 'node:fs/promises';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { LogEvent } from '../run/log-event.js';
import { FILE_MODE, unwritable, unwritableIfFails } from './files.js';

/** Bytes read at a time when a log is followed. */
const PIECE_BYTES = 64 * 1024;
/** The longest line taken for a line of ours. Bytes. */
const LINE_BYTES_MOST = 4 * 1024 * 1024;

/** A line of `log.jsonl` with its 1-based number, which is its id in the event stream. */
export interface LogLine {
  readonly id: number;
  readonly text: string;
}

/**
 * `log.jsonl` of one run: the round log as it is written. Lines are written at once and in order; the first and the
 * last are on stable storage before `append` returns (those between can be made again from the journal).
 */
export class RunLog {
  private readonly followers = new Set<() => void>();

  private constructor(
    readonly path: string,
    private readonly fd: number,
  ) {}

  /** Opens the log, new or not; a last line that was cut off is removed. */
  static open(path: string): Promise<Checked<RunLog>> {
    return unwritableIfFails(path, () => {
      const fd = openSync(path, 'a+', FILE_MODE);
      cutTornLine(fd);
      return new RunLog(path, fd);
    });
  }

  /** Done when it returns, so that nothing comes between a line and what it tells of. */
  append(event: LogEvent): Checked<null> {
    try {
      this.write(Buffer.from(`${JSON.stringify(event)}\n`));
      if (event.event === 'accepted' || event.event === 'outcome') fdatasyncSync(this.fd);
    } catch (error) {
      return unwritable(this.path, error);
    }
    for (const wake of this.followers) wake();
    return succeed(null);
  }

  /** The whole line or nothing: on a disk that is full a part may be written. */
  private write(line: Buffer): void {
    const { size, nlink } = fstatSync(this.fd);
    if (nlink === 0) throw new Error('the file was removed');
    try {
      for (let at = 0; at < line.length; ) at += writeSync(this.fd, line, at);
    } catch (error) {
      ftruncateSync(this.fd, size);
      throw error;
    }
  }

  /** Calls `wake` after every line from now on; returns what ends that. */
  follow(wake: () => void): () => void {
    this.followers.add(wake);
    return () => this.followers.delete(wake);
  }

  close(): void {
    closeSync(this.fd);
  }
}

/** Reads whole lines of a log, piece by piece, also while it grows. */
export class LogReader {
  private offset = 0;
  private lines = 0;
  private rest: Buffer = Buffer.alloc(0);

  constructor(private readonly path: string) {}

  /** The next lines there are, at most one piece; empty at the present end. */
  async next(): Promise<readonly LogLine[]> {
    const handle = await open(this.path, 'r');
    try {
      for (;;) {
        const piece = Buffer.alloc(PIECE_BYTES);
        const { bytesRead } = await handle.read(piece, 0, PIECE_BYTES, this.offset);
        if (bytesRead === 0) return [];
        this.offset += bytesRead;
        const lines = this.cut(Buffer.concat([this.rest, piece.subarray(0, bytesRead)]));
        if (lines.length > 0) return lines;
        if (this.rest.length > LINE_BYTES_MOST) throw new RangeError(`a line of ${this.path} is too long`);
      }
    } finally {
      await handle.close();
    }
  }

  private cut(bytes: Buffer): LogLine[] {
    const lines: LogLine[] = [];
    let from = 0;
    for (let end = bytes.indexOf(10); end >= 0; end = bytes.indexOf(10, from)) {
      this.lines += 1;
      lines.push({ id: this.lines, text: bytes.toString('utf8', from, end) });
      from = end + 1;
    }
    this.rest = bytes.subarray(from);
    return lines;
  }
}

/** All events of a log, in order. */
export function readLog(path: string): Promise<Checked<LogEvent[]>> {
  return unwritableIfFails(path, async () => {
    const reader = new LogReader(path);
    const events: LogEvent[] = [];
    for (let lines = await reader.next(); lines.length > 0; lines = await reader.next()) {
      for (const { text } of lines) events.push(JSON.parse(text));
    }
    return events;
  });
}

function cutTornLine(fd: number): void {
  const { size } = fstatSync(fd);
  const piece = Buffer.alloc(Math.min(size, LINE_BYTES_MOST));
  readSync(fd, piece, 0, piece.length, size - piece.length);
  const whole = size - piece.length + piece.lastIndexOf(10) + 1;
  if (whole < size) ftruncateSync(fd, whole);
}
