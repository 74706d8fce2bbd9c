import type { Failure } from '../../protocol/failure.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Parsed } from '../../protocol/specification/yaml-document.js';
import { parseSiteFile, type SiteFile } from '../custody/site-file.js';
import { readDocument } from '../service/site-folder.js';

export type Read<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly failures: readonly [Failure, ...Failure[]] };

export interface SpecificationFile {
  readonly file: string;
  readonly specification: FitSpecification;
  readonly digest: string;
}

export const readSiteFile = (file: string): Promise<Read<SiteFile>> => readWith(file, parseSiteFile);

export async function readSpecification(file: string): Promise<Read<SpecificationFile>> {
  const read = await readWith(file, parseFitSpecification);
  if (!read.ok) return read;
  const specification = read.value;
  return { ok: true, value: { file, specification, digest: digestOf(canonicalText(specification)) } };
}

async function readWith<T>(file: string, parse: (text: string, file: string) => Parsed<T>): Promise<Read<T>> {
  const text = await readDocument(file);
  if (!text.ok) return { ok: false, failures: [text.failure] };
  const parsed = parse(text.value, file);
  if (parsed.ok) return parsed;
  const [first, ...more] = parsed.failures;
  if (first === undefined) throw new Error(`${file} was refused without a reason`);
  return { ok: false, failures: [first, ...more] };
}
