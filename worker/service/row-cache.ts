import { randomBytes } from 'node:crypto';
import { closeSync, constants, fstatSync, openSync, readSync, unlinkSync, writeSync } from 'node:fs';
import { dirname } from 'node:path';
import { crc32 } from 'node:zlib';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { type RowReader, RowsLost } from '../design/streamed-rows.js';

/** Numbers of a piece of the file: what is written at once, and has one checksum. */
const PIECE_NUMBERS = 32_768;

/** Rows of one group that lie one after the other. */
interface Piece {
  /** First byte in the file. */
  readonly at: number;
  readonly rows: number;
  readonly checksum: number;
}

/** A group's rows that are not written yet, and its pieces that are. */
interface Group {
  readonly waiting: Float64Array;
  rows: number;
  readonly pieces: Piece[];
}

/**
 * Rows of one width in a file without a name: it is unlinked as soon as it is open, so that nobody else opens it and it goes
 * with this process, however that ends. Rows come in any order of groups and are read group after group. What is read is
 * compared with the checksums taken when it was written.
 */
export class RowCacheWriter {
  readonly #groups = new Map<number, Group>();
  readonly #rowsMost: number;
  #bytes = 0;

  private constructor(
    private readonly file: number,
    private readonly folder: string,
    private readonly width: number,
  ) {
    this.#rowsMost = Math.max(1, Math.floor(PIECE_NUMBERS / Math.max(width, 1)));
  }

  /**
   * Mode 0600. Fails with `state-unwritable`.
   *
   * @param beginning of the path that the file has for an instant
   */
  static open(beginning: string, width: number): Checked<RowCacheWriter> {
    const folder = dirname(beginning);
    const path = `${beginning}-${randomBytes(6).toString('hex')}`;
    const { O_RDWR, O_CREAT, O_EXCL } = constants;
    try {
      const file = openSync(path, O_RDWR | O_CREAT | O_EXCL, 0o600);
      try {
        unlinkSync(path);
      } catch (error) {
        closeSync(file);
        throw error;
      }
      return succeed(new RowCacheWriter(file, folder, width));
    } catch (error) {
      return unwritable(folder, error);
    }
  }

  get bytes(): number {
    return this.#bytes;
  }

  /** `groups`: one a row, null for one group. Fails with `state-unwritable`. */
  append(x: Float64Array, rowCount: number, groups: Int32Array | null): Checked<null> {
    const { width } = this;
    try {
      for (let row = 0; row < rowCount; row++) {
        const group = this.#groupOf(groups === null ? 0 : groups[row]);
        group.waiting.set(x.subarray(row * width, (row + 1) * width), group.rows * width);
        group.rows++;
        if (group.rows === this.#rowsMost) this.#write(group);
      }
      return succeed(null);
    } catch (error) {
      return unwritable(this.folder, error);
    }
  }

  /** The rows group after group. Fails with `state-unwritable`. */
  finish(order: readonly number[]): Checked<RowCache> {
    try {
      for (const group of this.#groups.values()) if (group.rows > 0) this.#write(group);
      const pieces = order.flatMap((group) => this.#groups.get(group)?.pieces ?? []);
      return succeed(new RowCache(this.file, this.folder, this.width, pieces));
    } catch (error) {
      return unwritable(this.folder, error);
    }
  }

  close(): void {
    closeSync(this.file);
  }

  #groupOf(number: number): Group {
    const found = this.#groups.get(number);
    if (found !== undefined) return found;
    const made: Group = { waiting: new Float64Array(this.#rowsMost * this.width), rows: 0, pieces: [] };
    this.#groups.set(number, made);
    return made;
  }

  #write(group: Group): void {
    const bytes = bytesOf(group.waiting, group.rows * this.width);
    const at = this.#bytes;
    for (let done = 0; done < bytes.length; )
      done += writeSync(this.file, bytes, done, bytes.length - done, at + done);
    this.#bytes += bytes.length;
    group.pieces.push({ at, rows: group.rows, checksum: crc32(bytes) });
    group.rows = 0;
  }
}

/** Finds out before a run whether rows could be kept there. */
export function checkRowCache(beginning: string): Checked<null> {
  const opened = RowCacheWriter.open(beginning, 1);
  if (!opened.ok) return opened;
  opened.value.close();
  return succeed(null);
}

export class RowCache implements RowReader {
  readonly rowCount: number;
  /** Row that each piece begins with. */
  readonly #firsts: Float64Array;
  readonly #spare: Float64Array;
  #open = true;

  constructor(
    private readonly file: number,
    private readonly folder: string,
    readonly width: number,
    private readonly pieces: readonly Piece[],
  ) {
    this.#firsts = new Float64Array(pieces.length);
    let rows = 0;
    let most = 0;
    pieces.forEach((piece, k) => {
      this.#firsts[k] = rows;
      rows += piece.rows;
      most = Math.max(most, piece.rows);
    });
    this.rowCount = rows;
    this.#spare = new Float64Array(most * width);
  }

  read(from: number, to: number, out: Float64Array): void {
    const { width, pieces } = this;
    for (let k = this.#pieceOf(from), row = from; row < to; k++) {
      const first = this.#firsts[k];
      const end = Math.min(first + pieces[k].rows, to);
      const at = (row - from) * width;
      if (row === first && end === first + pieces[k].rows) this.#load(pieces[k], out.subarray(at));
      else {
        this.#load(pieces[k], this.#spare);
        out.set(this.#spare.subarray((row - first) * width, (end - first) * width), at);
      }
      row = end;
    }
  }

  close(): void {
    // the number of a closed file may be that of another one next
    if (this.#open) closeSync(this.file);
    this.#open = false;
  }

  /** The last piece that begins at or before the row. */
  #pieceOf(row: number): number {
    let low = 0;
    let high = this.pieces.length - 1;
    while (low < high) {
      const middle = Math.ceil((low + high) / 2);
      if (this.#firsts[middle] <= row) low = middle;
      else high = middle - 1;
    }
    return low;
  }

  #load(piece: Piece, out: Float64Array): void {
    const bytes = bytesOf(out, piece.rows * this.width);
    if (!this.#open) throw this.#lost('was closed');
    let done = 0;
    try {
      while (done < bytes.length) {
        const read = readSync(this.file, bytes, done, bytes.length - done, piece.at + done);
        if (read === 0) break;
        done += read;
      }
    } catch (error) {
      throw this.#lost(`cannot be read (${codeOf(error)})`);
    }
    if (done < bytes.length) throw this.#lost(`was cut to ${fstatSync(this.file).size} bytes`);
    if (crc32(bytes) !== piece.checksum) throw this.#lost('is not as it was written');
  }

  #lost(what: string): RowsLost {
    return new RowsLost(this, `The rows kept in ${this.folder} are lost: the file ${what}.`);
  }
}

const bytesOf = (values: Float64Array, count: number): Uint8Array =>
  new Uint8Array(values.buffer, values.byteOffset, 8 * count);

const codeOf = (error: unknown): string =>
  error instanceof Error && 'code' in error ? String(error.code) : String(error);

const unwritable = (folder: string, error: unknown): ReturnType<typeof fail> =>
  fail('state-unwritable', `The rows cannot be kept on disk (${codeOf(error)}).`, {
    remedy: 'Check the access rights of the folder and the space on its disk, or give more --memory.',
    where: { file: folder },
  });
