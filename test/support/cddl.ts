/**
 * Reads the part of CDDL (RFC 8610) that protocol/messages.cddl uses, and writes zod schemas and CDDL rules in one
 * common form, so that they can be compared: every rule is put in the place of its name.
 */
import { z } from 'zod';

/** Rule name → its text without comments and with single spaces. */
export function cddlRules(text: string): Map<string, string> {
  // how long a text may be is said in comments, since CDDL's own word for it counts bytes
  const plain = text
    .replaceAll(/\btstr\b(.*);.*?(?:(\d+) to |at most )(\d+) characters/g, 'tstr-$2-$3$1;')
    .replaceAll(/\btstr\b(.*);.*?(\d+) hexadecimal digits/g, 'tstr-$2-$2$1;')
    .replaceAll(/;[^\n]*/g, '');
  const rules = plain.split(/^(?=[a-z-]+ = ?)/m).filter((rule) => /^[a-z-]+ =/.test(rule));
  return new Map(
    rules.map((rule): [string, string] => {
      const at = rule.indexOf('=');
      return [
        rule.slice(0, at).trim(),
        rule
          .slice(at + 1)
          .replaceAll(/\s+/g, ' ')
          .trim(),
      ];
    }),
  );
}

/** These stay names: what they stand for is checked by other tests. */
const PRIMITIVES = new Set(['vector', 'number', 'positive', 'count', 'positive-count', 'tstr', 'bool']);

/** The common form of a CDDL type. Choices and map keys are sorted, since their order does not matter. */
export function formOfCddl(type: string, rules: ReadonlyMap<string, string>): string {
  const text = type.trim();
  const choices = splitOutside(text, '/');
  if (choices.length > 1) return choiceForm(choices.map((choice) => formOfCddl(choice, rules)));
  if (text.startsWith('{')) {
    const members = splitOutside(text.slice(1, -1), ',').filter((member) => member.trim() !== '');
    return mapForm(
      members.map((member) => {
        const at = member.indexOf(':');
        return [member.slice(0, at).trim(), formOfCddl(member.slice(at + 1), rules)];
      }),
    );
  }
  const array = /^\[(?:(\+)|(\d*)\*(\d*)) ?([a-z0-9-]+)\]$/.exec(text);
  if (array !== null) {
    const [, plus, least, most, element] = array;
    return arrayForm(
      plus === undefined ? Number(least) : 1,
      most ? Number(most) : null,
      formOfCddl(element, rules),
    );
  }
  if (/^("[a-z-]+"|\d+|null|tstr-\d*-\d+)$/.test(text) || PRIMITIVES.has(text)) return text;
  const rule = rules.get(text);
  if (rule === undefined) throw new Error(`CDDL names "${text}", which no rule defines`);
  return formOfCddl(rule, rules);
}

/** The common form of a schema of this protocol. */
export function formOfSchema(schema: z.core.$ZodType): string {
  if (schema instanceof z.ZodObject) {
    if (!(schema._zod.def.catchall instanceof z.ZodNever)) throw new Error('a map that takes unknown keys');
    return mapForm(Object.entries(schema.shape).map(([key, value]) => [key, formOfSchema(value)]));
  }
  if (schema instanceof z.ZodNullable) return choiceForm([formOfSchema(schema.unwrap()), 'null']);
  if (schema instanceof z.ZodUnion) return choiceForm(schema.options.map(formOfSchema));
  if (schema instanceof z.ZodEnum) return choiceForm(schema.options.map((option) => JSON.stringify(option)));
  if (schema instanceof z.ZodLiteral)
    return choiceForm([...schema.values].map((value) => JSON.stringify(value)));
  if (schema instanceof z.ZodArray) return arrayFormOf(schema);
  if (schema instanceof z.ZodString) return textForm(schema);
  if (schema instanceof z.ZodBoolean) return 'bool';
  if (schema instanceof z.ZodNumber) return numberForm(schema);
  if (schema instanceof z.ZodCustom) return 'vector';
  throw new Error(`a schema that CDDL has no form for: ${schema._zod.def.type}`);
}

function textForm(schema: z.ZodString): string {
  let least = '';
  let most = '';
  for (const check of checksOf(schema)) {
    if (check instanceof z.core.$ZodCheckMinLength) least = `${check._zod.def.minimum}`;
    if (check instanceof z.core.$ZodCheckMaxLength) most = `${check._zod.def.maximum}`;
    if (check instanceof z.core.$ZodCheckLengthEquals) least = most = `${check._zod.def.length}`;
  }
  return most === '' ? 'tstr' : `tstr-${least}-${most}`;
}

function arrayFormOf(schema: z.ZodArray): string {
  let least = 0;
  let most: number | null = null;
  for (const check of checksOf(schema)) {
    if (check instanceof z.core.$ZodCheckMinLength) least = check._zod.def.minimum;
    if (check instanceof z.core.$ZodCheckMaxLength) most = check._zod.def.maximum;
  }
  return arrayForm(least, most, formOfSchema(schema.element));
}

function numberForm(schema: z.ZodNumber): string {
  let least = Number.NEGATIVE_INFINITY;
  for (const check of checksOf(schema)) {
    if (check instanceof z.core.$ZodCheckGreaterThan) least = Math.max(least, Number(check._zod.def.value));
  }
  if (schema.format === 'safeint') return least === 1 ? 'positive-count' : 'count';
  return least === 0 ? 'positive' : 'number';
}

const checksOf = (schema: z.core.$ZodType): readonly z.core.$ZodCheck<never>[] =>
  schema._zod.def.checks ?? [];

const choiceForm = (choices: readonly string[]): string =>
  choices
    .flatMap((choice) => splitOutside(choice, '/'))
    .map((choice) => choice.trim())
    .sort()
    .join(' / ');

const mapForm = (members: readonly (readonly [string, string])[]): string =>
  `{ ${members
    .map(([key, value]) => `${key}: ${value}`)
    .sort()
    .join(', ')} }`;

const arrayForm = (least: number, most: number | null, element: string): string =>
  `[${least}*${most ?? ''} (${element})]`;

/** Parts between separators that stand outside brackets and quotes. */
function splitOutside(text: string, separator: string): string[] {
  const parts: string[] = [];
  let depth = 0;
  let quoted = false;
  let from = 0;
  for (let at = 0; at < text.length; at++) {
    const character = text[at];
    if (character === '"') quoted = !quoted;
    if (quoted) continue;
    if ('{[('.includes(character)) depth++;
    else if ('}])'.includes(character)) depth--;
    else if (character === separator && depth === 0) {
      parts.push(text.slice(from, at));
      from = at + 1;
    }
  }
  parts.push(text.slice(from));
  return parts;
}
