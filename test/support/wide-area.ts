import { type Line, SlowLink } from './slow-link.js';
import { longFit, siteFileOf, smallTable } from './small-scenario.js';
import { type Following, Stage } from './stage.js';

export const WIDE_SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'] as const;
export type WideSite = (typeof WIDE_SITES)[number];

/** To a relative gap of 1e-6. */
export const WIDE_FIT = 'wide.fit.yaml';
/** To a relative gap of 1e-10. */
export const LONG_FIT = 'long.fit.yaml';
/** For many rounds. */
export const NO_CURVATURE = ['curvature-most: 0'];
const ROWS = 1200;
/** A run on the worst line here, on a machine that is busy with other tests. Milliseconds. */
const RUN_TAKES_MOST_MS = 240_000;

/** One coordinator and four workers in processes of their own, each worker behind a line that can be made bad. */
export class WideArea {
  private constructor(
    readonly stage: Stage,
    private readonly links: ReadonlyMap<string, SlowLink>,
  ) {}

  /** Everything is ready and every worker started; the lines are perfect. `policy`: lines for every site file. */
  static async open(name: string, policy: readonly string[]): Promise<WideArea> {
    const stage = await Stage.open(name);
    await stage.serve();
    const port = Number(new URL(stage.address).port);
    const links = new Map<string, SlowLink>();
    for (const [index, site] of WIDE_SITES.entries()) {
      const link = await SlowLink.open(port, {}, 41 + index);
      links.set(site, link);
      await writeSite(stage, site, link.port, policy);
    }
    await writeFits(stage);
    for (const site of WIDE_SITES) stage.join(site);
    return new WideArea(stage, links);
  }

  link(site: WideSite): SlowLink {
    const link = this.links.get(site);
    if (link === undefined) throw new Error(`no line to ${site}`);
    return link;
  }

  get all(): SlowLink[] {
    return [...this.links.values()];
  }

  /** Every line becomes this one; what is not said is perfect. */
  setLines(line: Partial<Line>): void {
    for (const link of this.links.values()) link.setLine(line);
  }

  /** Follows a run to its end, which may be far off on a bad line. */
  async outcomeOf(following: Following): ReturnType<Following['outcome']> {
    await following.program.end(RUN_TAKES_MOST_MS);
    return following.outcome();
  }

  async close(): Promise<void> {
    await this.stage.close();
    await Promise.all(this.all.map((link) => link.close()));
  }
}

/** Table, site file and token of a site whose worker links at a port of the loopback. */
async function writeSite(
  stage: Stage,
  site: WideSite,
  port: number,
  policy: readonly string[],
): Promise<void> {
  const rows = Math.round(ROWS / (WIDE_SITES.indexOf(site) + 1));
  await stage.write(`${site}.csv`, smallTable(site, rows));
  const text = siteFileOf(stage, site, `{csv: ./${site}.csv}`, policy);
  await stage.write(`${site}.site.yaml`, text.replace(/(ws:\/\/127\.0\.0\.1):\d+/, `$1:${port}`));
  await stage.admit(site);
}

async function writeFits(stage: Stage): Promise<void> {
  const long = longFit(WIDE_SITES).replace(/barrier:.*/, 'barrier: {deadline: 1s, patience: 5m}');
  await stage.write(LONG_FIT, long);
  await stage.write(WIDE_FIT, long.replace(/rounds:.*/, 'rounds: {tolerance: 1e-6}'));
}
