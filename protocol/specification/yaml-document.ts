import {
  type Alias,
  type Document,
  isAlias,
  isMap,
  isScalar,
  isSeq,
  LineCounter,
  parseDocument,
  type YAMLError,
} from 'yaml';
import type { Failure } from '../failure.js';
import { LIMITS } from '../limits.js';

/** Like `Checked<T>`, with everything found wrong in a document and not only the first. */
export type Parsed<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly failures: Failure[] };

export type FieldPath = readonly PropertyKey[];

/** A document as plain values, able to say where each field stands. */
export interface DocumentSource {
  readonly file: string;
  readonly value: unknown;
  /** 1-based line of a field, or of the nearest enclosing one where it is missing; undefined where there are no lines. */
  readonly lineOf: (path: FieldPath) => number | undefined;
  /** What is wrong although the text could be read: fields written twice, keys that are no names. */
  readonly failures: readonly Failure[];
}

/** `terms[2].levels`; a key that is no plain word is quoted: `per-term["a b"]`. */
export function fieldName(path: FieldPath): string {
  let name = '';
  for (const step of path) {
    if (typeof step === 'number') name += `[${step}]`;
    else if (/^[\w-]+$/.test(String(step))) name += name === '' ? String(step) : `.${String(step)}`;
    else name += `[${JSON.stringify(String(step))}]`;
  }
  return name;
}

/** Where a field of a document stands, for `Failure.where`. */
export function placeOf(source: Pick<DocumentSource, 'file' | 'lineOf'>, path: FieldPath): Failure['where'] {
  const line = source.lineOf(path);
  const field = fieldName(path);
  return { file: source.file, ...(line === undefined ? {} : { line }), ...(field === '' ? {} : { field }) };
}

/** Reads one YAML 1.2 document. Syntax errors are all reported, with their lines, as `yaml-invalid`. */
export function readYaml(text: string, file: string): Parsed<DocumentSource> {
  if (text.length > LIMITS.textMost) {
    return unreadable(file, `The file has ${text.length} characters; at most ${LIMITS.textMost} are read.`);
  }
  const lines = new LineCounter();
  try {
    const document = parseDocument(text, {
      version: '1.2',
      lineCounter: lines,
      prettyErrors: false,
      uniqueKeys: false,
      logLevel: 'error',
    });
    const problems = [...document.errors, ...document.warnings];
    if (problems.length > 0) {
      return { ok: false, failures: problems.map((problem) => syntaxFailure(problem, lines, file)) };
    }
    if (document.directives?.yaml.version !== '1.2') {
      return unreadable(file, 'The file asks for YAML 1.1; allowed: YAML 1.2.');
    }
    const check: NodeCheck = { document, lines, file, failures: [], references: 0 };
    checkNode(document.contents, [], check);
    // With fields only written twice there is still a document to check further.
    if (check.failures.some((failure) => failure.code !== 'field-conflict')) {
      return { ok: false, failures: check.failures };
    }
    const lineOf = (path: FieldPath) => lineOfPath(document, lines, path);
    const value: unknown = document.toJS({ maxAliasCount: REFERENCES_MOST });
    return { ok: true, value: { file, value, lineOf, failures: check.failures } };
  } catch (error) {
    // The library throws where references expand without bound and where nesting exhausts the stack.
    const reason = error instanceof Error ? error.message : String(error);
    return unreadable(file, `The file cannot be read as YAML: ${reason}.`);
  }
}

/** Most references (`*name`), and most nodes one of them may expand to. */
const REFERENCES_MOST = 100;

const unreadable = (file: string, message: string): { readonly ok: false; readonly failures: Failure[] } => ({
  ok: false,
  failures: [{ code: 'yaml-invalid', message, where: { file } }],
});

function syntaxFailure(problem: YAMLError, lines: LineCounter, file: string): Failure {
  return {
    code: 'yaml-invalid',
    message: `This is not YAML 1.2: ${problem.message.replace(/\.$/, '')}.`,
    where: { file, line: Math.max(1, lines.linePos(problem.pos[0]).line) },
  };
}

const keyText = (key: unknown): string => (isScalar(key) ? String(key.value) : String(key));

const startOf = (node: unknown): number | undefined =>
  typeof node === 'object' && node !== null && 'range' in node && Array.isArray(node.range)
    ? node.range[0]
    : undefined;

function lineOfPath(document: Document, lines: LineCounter, path: FieldPath): number {
  let node: unknown = document.contents;
  let offset = startOf(node) ?? 0;
  for (const step of path) {
    if (isAlias(node)) node = node.resolve(document);
    let at: unknown;
    if (isMap(node)) {
      const pair = node.items.findLast((item) => keyText(item.key) === String(step));
      if (pair === undefined) break;
      at = pair.key;
      node = pair.value;
    } else if (isSeq(node) && typeof step === 'number' && step < node.items.length) {
      at = node.items[step];
      node = at;
    } else break;
    offset = startOf(at) ?? offset;
  }
  return Math.max(1, lines.linePos(offset).line);
}

interface NodeCheck {
  readonly document: Document;
  readonly lines: LineCounter;
  readonly file: string;
  readonly failures: Failure[];
  references: number;
}

/** References to nothing, names of fields that are no words, fields written twice. */
function checkNode(node: unknown, path: FieldPath, check: NodeCheck): void {
  if (isAlias(node)) checkReference(node, path, check);
  if (isSeq(node)) for (const [index, item] of node.items.entries()) checkNode(item, [...path, index], check);
  if (!isMap(node)) return;
  const seen = new Map<string, number>();
  for (const pair of node.items) {
    const { line } = check.lines.linePos(startOf(pair.key) ?? 0);
    const where = { file: check.file, line };
    const key = keyText(pair.key);
    const first = seen.get(key);
    if (!isScalar(pair.key) || pair.key.value === null || key === '__proto__') {
      const message = 'Found what cannot be the name of a field; allowed: a word.';
      check.failures.push({ code: 'field-type', message, where });
    } else if (first !== undefined) {
      const message = `The field "${key}" is written twice, on lines ${first} and ${line}; allowed: once.`;
      const remedy = 'Keep one of the two.';
      check.failures.push({
        code: 'field-conflict',
        message,
        remedy,
        where: { ...where, field: fieldName([...path, key]) },
      });
    }
    seen.set(key, first ?? line);
    checkNode(pair.value, [...path, key], check);
  }
}

function checkReference(reference: Alias, path: FieldPath, check: NodeCheck): void {
  check.references++;
  const tooMany = check.references > REFERENCES_MOST;
  if (!tooMany && reference.resolve(check.document) !== undefined) return;
  // One failure tells of all that are too many; looking each of them up would take time without bound.
  if (check.references > REFERENCES_MOST + 1) return;
  const message = tooMany
    ? `The file has more than ${REFERENCES_MOST} references; allowed: at most that many.`
    : `Found a reference to "${reference.source}", which names nothing; allowed: a name given before with &.`;
  const { line } = check.lines.linePos(startOf(reference) ?? 0);
  check.failures.push({
    code: 'yaml-invalid',
    message,
    where: { file: check.file, line, field: fieldName(path) },
  });
}
