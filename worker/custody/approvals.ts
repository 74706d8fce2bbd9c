import { type Checked, fail, succeed } from '../../protocol/failure.js';

/**
 * The approvals file, beside the site file: one approved specification a line, `DIGEST  TIME  TITLE`. A custodian may
 * edit it by hand: a line taken out withdraws the approval. Blank lines and lines that begin with # are skipped.
 */
export interface Approval {
  readonly digest: string;
  readonly at: string;
  readonly title: string;
}

export const isDigest = (text: string): boolean => /^[0-9a-f]{64}$/.test(text);

export function parseApprovals(text: string, file: string): Checked<readonly Approval[]> {
  const approvals: Approval[] = [];
  for (const [index, line] of text.split(/\r?\n/).entries()) {
    const words = line.trim();
    if (words === '' || words.startsWith('#')) continue;
    const [digest, at = '', ...title] = words.split(/\s+/);
    if (!isDigest(digest))
      return fail(
        'field-value',
        `Found "${digest.slice(0, 80)}" where a digest of 64 hex digits is expected.`,
        {
          remedy: 'Write each line as DIGEST TIME TITLE, or use "commonfit-worker approve".',
          where: { file, line: index + 1 },
        },
      );
    approvals.push({ digest, at, title: title.join(' ') });
  }
  return succeed(approvals);
}

/** The file's text with one approval more; the same text where the digest is there already. */
export function withApproval(text: string, approvals: readonly Approval[], added: Approval): string {
  if (approvals.some(({ digest }) => digest === added.digest)) return text;
  const start = text === '' ? '# Specifications this site takes part in. DIGEST  TIME  TITLE\n' : text;
  const ended = start.endsWith('\n') ? start : `${start}\n`;
  const title = added.title.replace(/\s+/g, ' ').trim();
  return `${ended}${added.digest}  ${added.at}  ${title}`.trimEnd().concat('\n');
}
