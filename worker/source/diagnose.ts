import { type Checked, type Failure, fail } from '../../protocol/failure.js';
import { doubleSql, textSql } from './column-sql.js';
import { type Engine, textRows } from './duckdb.js';
import type { Relation } from './relation.js';
import type { Finding, ScanColumn } from './scan.js';
import type { LevelsRequest } from './table.js';

/**
 * Says what is wrong with the value that a scan stopped at, by looking at it once more as text.
 *
 * @param levels for a level column: what was asked for, and the levels permitted in the end
 */
export async function diagnose(
  engine: Engine,
  relation: Relation,
  column: ScanColumn,
  finding: Finding,
  levels: { request: LevelsRequest; permitted: readonly string[] } | null,
): Promise<Failure> {
  const row = finding.row + 1;
  const where = { ...relation.where, row, column: column.name };
  if (finding.found === 'missing')
    return fail('value-missing', 'The value is missing.', {
      where,
      remedy: 'Fill it in, or say `missing: drop` in the fit specification to leave such rows out.',
    }).failure;
  const seen = await lookAt(engine, relation, column.name, finding.row);
  if (!seen.ok) return seen.failure;
  const { text, number } = seen.value;
  if (text === null)
    return fail('table-unreadable', 'The rows come in another order each time they are read.', {
      where,
      remedy: 'Give the query an `order by` that settles the order of every row.',
    }).failure;
  if (levels !== null) return levelFailure(text, levels, where);
  if (number !== null)
    return fail('value-not-finite', `The value ${text} is not finite.`, {
      where,
      remedy: 'Correct it or leave it empty as missing.',
    }).failure;
  return fail('column-not-numeric', `The value "${text}" is not a number.`, {
    where,
    remedy:
      'Correct it, leave it empty as missing, or give the column as a term with `levels`; decimals are written with a point.',
  }).failure;
}

async function lookAt(
  engine: Engine,
  relation: Relation,
  name: string,
  row: number,
): Promise<Checked<{ text: string | null; number: string | null }>> {
  const column = relation.columns.get(name);
  if (column === undefined) throw new Error(`the relation has no column ${name}`);
  const sql = `select ${textSql(column)}, ${doubleSql(column)} from ${relation.from} limit 1 offset ${row}`;
  const rows = await textRows(engine, sql, relation.where);
  if (!rows.ok) return rows;
  const [text = null, number = null] = rows.value[0] ?? [];
  return { ok: true, value: { text, number } };
}

function levelFailure(
  text: string,
  levels: { request: LevelsRequest; permitted: readonly string[] },
  where: Failure['where'],
): Failure {
  const listed = levels.permitted.map((level) => `"${level}"`).join(', ');
  if (levels.request.others === 'one')
    return fail('response-range', `The value "${text}" is a third class; found before: ${listed}.`, {
      where,
      remedy: 'A logistic response has two classes: correct the value or leave the row out.',
    }).failure;
  return fail('level-unknown', `The value "${text}" is not a permitted level; permitted: ${listed}.`, {
    where,
    remedy: 'Correct it, or add the level to the fit specification; text is compared letter by letter.',
  }).failure;
}
