import { fail } from '../../protocol/failure.js';
import { isDigest } from '../custody/approvals.js';
import { addApproval, besideSiteFile } from '../service/site-folder.js';
import { type Read, readSiteFile, readSpecification } from './documents.js';
import { EXIT, type ExitCode } from './exit-codes.js';
import { giveUp, say } from './terminal.js';

export interface ApproveOptions {
  readonly approvals?: string;
  readonly json: boolean;
}

/** Lets one specification in: by its file, or by the digest that a refusal or the analyst named. */
export async function approve(siteFile: string, what: string, options: ApproveOptions): Promise<ExitCode> {
  const [site, named] = await Promise.all([readSiteFile(siteFile), digestNamed(what)]);
  if (!site.ok) return giveUp(site.failures);
  if (!named.ok) return giveUp(named.failures);
  const file = options.approvals ?? besideSiteFile(site.value.file, 'approvals');
  const { digest, title } = named.value;
  const added = await addApproval(file, { digest, title, at: new Date().toISOString() });
  if (!added.ok) return giveUp([added.failure]);
  const needed = site.value.policy.approvals === 'listed';
  if (options.json)
    say([JSON.stringify({ site: site.value.site, digest, title, added: added.value, needed, file })]);
  else {
    const subject = title === '' ? 'this specification' : `"${title}"`;
    say([
      added.value
        ? `Site ${site.value.site} approves ${subject}.`
        : `Site ${site.value.site} had approved ${subject} before.`,
      `  digest ${digest}`,
      `  in ${file}; take the line out to withdraw.`,
      ...(needed ? [] : ['  The site file says "approvals: any", so this changes nothing for now.']),
    ]);
  }
  return EXIT.ok;
}

async function digestNamed(what: string): Promise<Read<{ digest: string; title: string }>> {
  const lower = what.toLowerCase();
  if (isDigest(lower)) return { ok: true, value: { digest: lower, title: '' } };
  if (/^[0-9a-f]{8,}$/.test(lower)) {
    const { failure } = fail('field-value', `Found a digest of ${what.length} digits; a digest has 64.`, {
      remedy: 'Give it in full, as "commonfit-worker inspect" prints it.',
    });
    return { ok: false, failures: [failure] };
  }
  const read = await readSpecification(what);
  return read.ok
    ? { ok: true, value: { digest: read.value.digest, title: read.value.specification.title } }
    : read;
}
