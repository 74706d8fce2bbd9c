import { readFileSync } from 'node:fs';
import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import { writeExample } from '../../examples/pipe-breaks/generate.js';
import { segmentsOf, UTILITIES } from '../../examples/pipe-breaks/segments.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { parseSiteFile } from '../../worker/custody/site-file.js';
import { buildRawShard } from '../../worker/design/build.js';
import { tableRequest } from '../../worker/design/request.js';
import { readTable } from '../../worker/source/read-table.js';
import { parsedValue } from '../support/specifications.js';
import { newFolder, soundValue } from '../support/tables.js';

describe('the pipe-breaks example', () => {
  test('every site file and the specification are sound, and every table reads as it was made', async () => {
    const out = newFolder();
    const options = { out, url: "wss://fit.example.net:7443/it's", curvatureMost: 'any', seed: 3 } as const;
    const files = await writeExample(options);
    expect(files.filter((file) => !file.endsWith('.yaml')).sort()).toEqual([
      'castlefen.csv',
      'harrowmere.parquet',
      'lindell-bay.jsonl',
      'oakhythe.csv',
    ]);
    const text = (file: string) => readFileSync(join(out, file), 'utf8');
    const spec = parsedValue(parseFitSpecification(text('breaks.fit.yaml'), 'breaks.fit.yaml'));
    expect(spec.sites).toEqual(UTILITIES.map((utility) => utility.name));
    for (const utility of UTILITIES) {
      const file = `${utility.name}.site.yaml`;
      const site = parsedValue(parseSiteFile(text(file), join(out, file)));
      expect(site.coordinator.url).toBe(options.url);
      expect(site.policy.curvatureMost).toBe('any');
      const table = soundValue(await readTable(site.table, tableRequest(spec, site.shard)));
      const made = segmentsOf(utility, 3);
      expect(table.numeric.get('km_years')).toEqual(Float64Array.from(made, (row) => row.km_years));
      const raw = soundValue(buildRawShard(spec, table));
      expect(raw.y).toEqual(Float64Array.from(made, (row) => row.breaks));
    }
  });

  test('the same seed gives the same rows, another seed others', () => {
    const [, , , oakhythe] = UTILITIES;
    expect(segmentsOf(oakhythe, 1)).toEqual(segmentsOf(oakhythe, 1));
    expect(segmentsOf(oakhythe, 1)).not.toEqual(segmentsOf(oakhythe, 2));
  });

  test('utilities differ strongly, and breaks scatter more than Poisson counts would', () => {
    const shares = UTILITIES.map((utility) => {
      const rows = segmentsOf(utility, 1);
      return rows.filter((row) => row.material === 'cast-iron').length / rows.length;
    });
    expect(Math.max(...shares) - Math.min(...shares)).toBeGreaterThan(0.4);
    const breaks = segmentsOf(UTILITIES[0], 1).map((row) => row.breaks);
    const mean = breaks.reduce((sum, value) => sum + value, 0) / breaks.length;
    const variance = breaks.reduce((sum, value) => sum + (value - mean) ** 2, 0) / breaks.length;
    expect(variance / mean).toBeGreaterThan(1.5);
  });
});
