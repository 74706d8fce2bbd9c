/**
 * Writes the licences of the packages in a node_modules folder, for the images:  node third-party.mjs node_modules > THIRD-PARTY
 * A package without a licence text is listed with the name of its licence. Fails where a package says neither.
 */
import { existsSync, readdirSync, readFileSync } from 'node:fs';
import { join } from 'node:path';

/** Folders of packages, scoped and nested ones included, by path. */
function packagesIn(folder) {
  if (!existsSync(folder)) return [];
  return readdirSync(folder)
    .filter((name) => !name.startsWith('.'))
    .sort()
    .flatMap((name) => {
      const path = join(folder, name);
      if (name.startsWith('@')) return packagesIn(path);
      return existsSync(join(path, 'package.json')) ? [path, ...packagesIn(join(path, 'node_modules'))] : [];
    });
}

function licenceOf(path) {
  const { name, version, license, licenses } = JSON.parse(readFileSync(join(path, 'package.json'), 'utf8'));
  const named =
    typeof license === 'string' ? license : (license?.type ?? licenses?.map(({ type }) => type).join(' OR '));
  const files = readdirSync(path).filter((file) => /^(licen[cs]e|notice|copying)/i.test(file));
  const texts = files.sort().map((file) => readFileSync(join(path, file), 'utf8').trim());
  if (named === undefined && texts.length === 0) throw new Error(`${name} ${version} says no licence`);
  return `${name} ${version}\nLicence: ${named ?? 'see below'}\n\n${texts.join('\n\n')}\n`;
}

const [folder = 'node_modules'] = process.argv.slice(2);
const rule = `\n${'-'.repeat(80)}\n\n`;
process.stdout.write(
  `Packages of others in this image, each under its own licence.\n${rule}${packagesIn(folder).map(licenceOf).join(rule)}`,
);
