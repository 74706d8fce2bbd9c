/**
 * A small coverage-guided fuzzer of the codec: inputs that run a block of `protocol/` or of the CBOR library that no
 * input ran before are kept and spoiled further. `npm run fuzz -- --seconds 60 [--executions N] [--seed N] [--keep]`;
 * `--keep` writes what was found into the corpus, which `npm test` plays again.
 */
import { createHash } from 'node:crypto';
import { writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { parseArgs } from 'node:util';
import { type Random, seededRandom } from '../../numerics/random.js';
import { encodeMessage } from '../../protocol/codec.js';
import { toCoordinatorMessages, toWorkerMessages } from '../support/messages.js';
import { readItems, writeItems } from './cbor-items.js';
import { CORPUS_FOLDER, readCorpus } from './corpus.js';
import { Coverage } from './coverage.js';
import { judge } from './judge.js';
import { DAMAGES, SPOILINGS, spoilTree } from './mutations.js';

/** Inputs between two looks at the coverage; a look costs as much as some hundred inputs. */
const BATCH = 200;
const INPUT_BYTES_MOST = 16_384;
/** Share of inputs whose structure is spoiled before their bytes are. */
const STRUCTURED = 0.7;
const CHANGES_MOST = 4;

interface Limits {
  readonly seconds: number;
  readonly executions: number;
  readonly seed: number;
  readonly keep: boolean;
}

function limitsOf(args: readonly string[]): Limits {
  const { values } = parseArgs({
    args: [...args],
    options: {
      seconds: { type: 'string', default: '60' },
      executions: { type: 'string', default: '1e9' },
      seed: { type: 'string', default: '1' },
      keep: { type: 'boolean', default: false },
    },
  });
  const number = (text: string): number => {
    const read = Number(text);
    if (!(read >= 0)) throw new Error(`${text} is no number`);
    return read;
  };
  return {
    seconds: number(values.seconds),
    executions: number(values.executions),
    seed: number(values.seed),
    keep: values.keep,
  };
}

class Fuzzer {
  executions = 0;
  /** Blocks that some input has run. */
  readonly blocks = new Set<string>();
  readonly found: Uint8Array[] = [];
  private readonly valid = [...toWorkerMessages, ...toCoordinatorMessages].map(encodeMessage);
  private readonly inputs: Uint8Array[];
  private readonly coverage = new Coverage((url) => /\/dist\/protocol\/|\/cborg\//.test(url));

  /** Runs what is known already, so that only what goes beyond it counts as found. */
  constructor(
    corpus: readonly Uint8Array[],
    private readonly random: Random,
  ) {
    this.inputs = [...this.valid, ...corpus];
    for (const input of this.inputs) judge(input);
    this.add(this.coverage.take());
  }

  batch(): void {
    const inputs = Array.from({ length: BATCH }, () => this.next());
    for (const input of inputs) judge(input);
    this.executions += BATCH;
    const blocks = this.coverage.take();
    if (!this.isNew(blocks)) return;
    for (const input of inputs) this.keepIfNew(input);
    // What shows only in a batch (a counter at its limit, code compiled anew) is of no single input.
    this.add(blocks);
  }

  private keepIfNew(input: Uint8Array): void {
    judge(input);
    const blocks = this.coverage.take();
    if (!this.isNew(blocks)) return;
    this.add(blocks);
    this.inputs.push(input);
    this.found.push(input);
  }

  private isNew(blocks: readonly string[]): boolean {
    return blocks.some((block) => !this.blocks.has(block));
  }

  private add(blocks: readonly string[]): void {
    for (const block of blocks) this.blocks.add(block);
  }

  private next(): Uint8Array {
    const { random } = this;
    let frame = this.pick();
    if (random.uniform() < STRUCTURED) {
      const tree = readItems(this.valid[random.integer(this.valid.length)]);
      const names = Object.keys(SPOILINGS);
      const other = readItems(this.valid[random.integer(this.valid.length)]);
      for (let changes = 1 + random.integer(CHANGES_MOST); changes > 0; changes--) {
        spoilTree(tree, names[random.integer(names.length)], random, other);
      }
      frame = writeItems(tree);
      if (random.uniform() < STRUCTURED) return frame;
    }
    const names = Object.keys(DAMAGES);
    for (let changes = 1 + random.integer(CHANGES_MOST); changes > 0 && frame.length > 0; changes--) {
      frame = DAMAGES[names[random.integer(names.length)]](frame, random, this.pick());
    }
    return frame.slice(0, INPUT_BYTES_MOST);
  }

  private pick(): Uint8Array {
    return this.inputs[this.random.integer(this.inputs.length)];
  }
}

/** Fuzzes within the limits and says what came of it. */
async function main({ seconds, executions, seed, keep }: Limits): Promise<void> {
  const corpus = await readCorpus();
  const fuzzer = new Fuzzer(corpus, seededRandom(seed));
  const known = fuzzer.blocks.size;
  const startedMs = performance.now();
  const secondsGone = (): number => (performance.now() - startedMs) / 1000;
  while (secondsGone() < seconds && fuzzer.executions < executions) fuzzer.batch();
  const { found, blocks } = fuzzer;
  if (keep) {
    for (const input of found) {
      const name = createHash('sha256').update(input).digest('hex').slice(0, 16);
      await writeFile(join(CORPUS_FOLDER, `${name}.hex`), `${Buffer.from(input).toString('hex')}\n`);
    }
  }
  console.log(
    `${fuzzer.executions} inputs in ${secondsGone().toFixed(0)} s, no promise broken; ` +
      `${blocks.size} blocks run, ${known} of them by the ${corpus.length} inputs of the corpus and the valid messages; ` +
      `${found.length} inputs found${keep ? ' and kept' : ''}.`,
  );
}

await main(limitsOf(process.argv.slice(2)));
