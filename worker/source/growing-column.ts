type NumberArray = Float64Array | Int32Array | Uint32Array;

const BLOCK_ROWS = 16_384;

/** A column of unknown length, in blocks, so that growing copies nothing. */
export class GrowingColumn<T extends NumberArray> {
  private readonly full: T[] = [];
  private block: T;
  private filled = 0;

  constructor(private readonly allocate: (length: number) => T) {
    this.block = allocate(BLOCK_ROWS);
  }

  /** Appends the values at `places`. */
  append(values: NumberArray, places: Int32Array): void {
    for (let i = 0; i < places.length; i++) {
      if (this.filled === BLOCK_ROWS) this.nextBlock();
      this.block[this.filled++] = values[places[i]];
    }
  }

  appendAll(values: NumberArray): void {
    for (let i = 0; i < values.length; i++) {
      if (this.filled === BLOCK_ROWS) this.nextBlock();
      this.block[this.filled++] = values[i];
    }
  }

  private nextBlock(): void {
    this.full.push(this.block);
    this.block = this.allocate(BLOCK_ROWS);
    this.filled = 0;
  }

  /** One array; the blocks are let go. */
  finish(): T {
    const whole = this.allocate(this.full.length * BLOCK_ROWS + this.filled);
    this.full.forEach((block, i) => {
      whole.set(block, i * BLOCK_ROWS);
    });
    whole.set(this.block.subarray(0, this.filled), this.full.length * BLOCK_ROWS);
    this.full.length = 0;
    this.block = this.allocate(0);
    return whole;
  }
}

export const growingDoubles = (): GrowingColumn<Float64Array> =>
  new GrowingColumn((length) => new Float64Array(length));

export const growingCodes = (): GrowingColumn<Int32Array> =>
  new GrowingColumn((length) => new Int32Array(length));

export const growingRowNumbers = (): GrowingColumn<Uint32Array> =>
  new GrowingColumn((length) => new Uint32Array(length));
