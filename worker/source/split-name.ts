import { type Checked, fail, type Place, succeed } from '../../protocol/failure.js';

const nameMost = 100;

/**
 * A site's name as a file name. Names come from the data, hence only letters, digits, dot, underscore and hyphen, not
 * starting with a dot, and no two that differ by case only, which some file systems do not tell apart.
 */
export function siteFileName(name: string | null, taken: readonly string[], where: Place): Checked<string> {
  if (name === null || name === '')
    return fail('value-missing', 'The row does not say which site it belongs to.', {
      where,
      remedy: 'Fill in the column that the table is split by.',
    });
  if (!/^[A-Za-z0-9_-][A-Za-z0-9._-]*$/.test(name) || name.length > nameMost)
    return fail('field-value', `The site "${name.slice(0, nameMost)}" cannot be a file name.`, {
      where,
      remedy: `Use letters, digits, ".", "_" and "-", not starting with ".", ${nameMost} characters at most.`,
    });
  const twin = taken.find((other) => other !== name && other.toLowerCase() === name.toLowerCase());
  if (twin !== undefined)
    return fail('field-value', `The sites "${twin}" and "${name}" differ by case only.`, {
      where,
      remedy: 'Spell the site the same way in every row.',
    });
  return succeed(name);
}
