import { counted, listed } from '../phrases.js';
import { figure, percent, tick, whole } from './figures.js';
import { fitStoodBy, type ReportInput, roundsOf } from './input.js';
import { type Content, coded, html } from './markup.js';
import { commands, definitions, list, paragraphs, type Section, table } from './parts.js';
import { certificateWords } from './verdict.js';

/** Sites under which differences between sites are hardly to be told from chance. */
const SITES_FEW = 6;
/** Fits in the table of certificates. */
const CERTIFICATES_MOST = 40;

/** The certificate in plain words, then its numbers. */
export function certificateSection({ result }: ReportInput): Section {
  const fit = fitStoodBy(result);
  const certified = result.fits.slice(0, CERTIFICATES_MOST);
  const more = result.fits.length - certified.length;
  return {
    id: 'certificate',
    heading: 'The certificate',
    body: [
      html`<p>A certificate does not ask whether the iteration seemed to stop. It takes the final coefficients to every site, and bounds from the answers how far the objective there can be above the least possible.</p>`,
      fit === null ? null : html`<p>${certificateWords(fit.certificate, result.tolerance)}</p>`,
      certified.length === 0
        ? html`<p>No fit was made.</p>`
        : table({
            id: 'certificates-table',
            caption: `Certificates, tolerance ${tick(result.tolerance)}${more > 0 ? `: the first ${certified.length} of ${whole(result.fits.length)} fits` : ''}`,
            folded: certified.length > 8,
            columns: [
              'Fit',
              'Kind',
              { number: 'Relative distance, at most' },
              { number: 'Largest entry of the gradient left over' },
              { number: 'Rounds' },
              'Ended',
            ],
            rows: certified.map(({ certificate, rounds, outcome }, at) => [
              at + 1,
              certificate?.kind ?? 'none',
              figure(certificate?.relativeGap, 2),
              figure(certificate?.kkt, 2),
              rounds,
              outcome,
            ]),
          }),
    ],
  };
}

/** What left each site, in numbers and kinds. */
export function leftSection(input: ReportInput): Section {
  const { result } = input;
  const rows = new Map(result.sites.map(({ site, rowsUsed }) => [site, rowsUsed]));
  return {
    id: 'left',
    heading: 'What left each site',
    body: [
      html`<p>No row left a site. What left, by kind:</p>`,
      list(kinds(input)),
      table({
        id: 'left-table',
        caption: 'Numbers sent and received, survey included',
        columns: [
          'Site',
          { number: 'Numbers sent' },
          { number: 'Numbers received' },
          { number: 'Sent for each row used' },
        ],
        rows: result.numbersSent.map(({ site, up, down }) => {
          const used = rows.get(site) ?? null;
          return [site, whole(up), whole(down), used === null || used === 0 ? '' : figure(up / used, 2)];
        }),
      }),
      purposes(input),
      html`<p>Which kinds may leave is the decision of each custodian, in the site’s own file: its worker refuses all others, and its ledger lists every message that left, with its digest. Numbers that left are sums over rows; sums can still tell something about few rows, which is what the least row counts of the policy are for.</p>`,
    ],
  };
}

/** What an answer of each rung holds: the kinds as policies name them, and in words. */
const RUNG_KINDS = {
  pooled: [
    'moments',
    'one triangular factor of the columns’ sums of squares and products, for all fits together',
  ],
  curvature: [
    'gradients, curvature',
    'mean loss, gradient and curvature matrix of the rows there, at points that the coordinator proposed',
  ],
  sketched: [
    'gradients, sketches',
    'mean loss and gradient, and the curvature’s products with a few directions',
  ],
  proximal: ['proximal, gradients', 'the site’s own solution held near a proposed point, and gradients'],
} as const;

function kinds({ result, specification }: ReportInput): Content[] {
  const { report } = specification;
  const { inference, comparison, fitQuality, choice, rung } = result;
  const margins = inference === null ? 0 : inference.marginalMeans.length + inference.marginalEffects.length;
  const cluster = report.sandwich?.cluster ?? null;
  const told: [string, string][] = [
    ...(result.rowsTotal === null
      ? []
      : [['counts', 'rows used and left out, and the mean and spread of each column'] as [string, string]]),
    ...(rung === null ? [] : [[...RUNG_KINDS[rung]] as [string, string]]),
    ...(choice?.crossValidation
      ? [['the same', 'once more for each fold held out, and the loss on it'] as [string, string]]
      : []),
    ...(report.sandwich !== null && inference !== null
      ? [
          [
            'curvature',
            `sums of products of gradients${cluster === null ? '' : `, also summed by ${cluster} first`}, for the sandwich`,
          ] as [string, string],
        ]
      : []),
    ...(comparison?.sites.some(({ own }) => own !== null)
      ? [['site-estimates', 'the coefficients and covariance of the site’s own fit'] as [string, string]]
      : []),
    ...(margins > 0
      ? [['gradients', 'sums of predictions and of their gradients, for the margins'] as [string, string]]
      : []),
    ...(fitQuality === null
      ? []
      : [
          ['residual-bins', 'counts and sums in bins of the prediction, small cells left out'] as [
            string,
            string,
          ],
        ]),
  ];
  return told.map(([kind, words]) => html`<strong>${kind}</strong>: ${words}.`);
}

function purposes({ events }: ReportInput): Content {
  const byPurpose = new Map<string, { rounds: number; up: number; down: number }>();
  for (const { purpose, numbersUp, numbersDown } of roundsOf(events)) {
    const own = byPurpose.get(purpose) ?? { rounds: 0, up: 0, down: 0 };
    byPurpose.set(purpose, { rounds: own.rounds + 1, up: own.up + numbersUp, down: own.down + numbersDown });
  }
  if (byPurpose.size === 0) return null;
  return table({
    id: 'purposes-table',
    caption: 'What the rounds were for, all sites together',
    columns: [
      'For',
      { number: 'Rounds' },
      { number: 'Numbers sent by sites' },
      { number: 'Numbers sent to sites' },
    ],
    rows: [...byPurpose].map(([purpose, { rounds, up, down }]) => [purpose, rounds, whole(up), whole(down)]),
  });
}

/** What a reader must not take from it. */
export function cautionsSection({ result, specification }: ReportInput): Section {
  const sites = result.sites.length;
  const fit = fitStoodBy(result);
  return {
    id: 'cautions',
    heading: 'Cautions',
    body: list([
      ...(result.inference?.cautions ?? []).map(coded),
      'The coefficients describe associations in the rows that took part. They do not show what causes what, and they say little about places, times or people that were not in it.',
      'This is not a substitute for licensed engineering or clinical judgement. Follow the codes, standards and permits that hold where you are, and the agreements with the owners of the data.',
      ...(sites > 0 && sites < SITES_FEW
        ? [
            `With ${counted(sites, 'site')}, how much sites differ is known only roughly: a test that finds no difference does not show that there is none.`,
          ]
        : []),
      ...(specification.penalties.length > 0
        ? [
            'Coefficients under a penalty are shrunk towards zero on purpose; a coefficient of zero was not shown to be zero.',
          ]
        : []),
      ...(fit !== null && fit.dropped.length > 0
        ? [`${listed(fit.dropped, 8)} could not be looked at: no spread at any site.`]
        : []),
      ...(result.inference !== null
        ? [
            `Of twenty intervals of ${percent(result.inference.level)} about one misses, even where all is well.`,
          ]
        : []),
    ]),
  };
}

/** How to name it, make it again and check it. */
export function auditSection({
  result,
  specification,
  run,
  submittedAt,
  endedAt,
  node,
  journal,
}: ReportInput): Section {
  const names = result.sites.map(({ site }) => site);
  const cited = `${specification.title}. Fit over the rows of ${listed(names, 8)} (${counted(result.rowsTotal ?? 0, 'row')}), ${endedAt.slice(0, 10)}. Made with ${result.software}, specification ${result.specification.slice(0, 16)}, run ${run}.`;
  return {
    id: 'audit',
    heading: 'To cite, to run again, to check',
    body: [
      html`<p class="cite">${cited}</p>`,
      paragraphs([
        'To run it again, with the same specification and the same sites; equal digests mean an equal question, and equal tables under the same Node version give the same result to the last bit:',
      ]),
      commands('Commands to run it again', [
        `commonfit check specification.yaml   # digest ${result.specification}`,
        'commonfit submit specification.yaml --watch',
        `commonfit result ${run} --out result`,
      ]),
      html`<p>To compute every step again from the recorded answers, without the sites:</p>`,
      commands('Command to compute it again from the journal', [
        'commonfit replay FOLDER   # the folder that holds the journal',
      ]),
      definitions([
        ['Run', run],
        ['Submitted', submittedAt],
        ['Ended', endedAt],
        ['Specification, SHA-256', html`<code>${result.specification}</code>`],
        ['Software', result.software],
        ['Node', node ?? 'not recorded here'],
        ...(journal === null
          ? [['Journal', 'not at hand where this page was written'] as const]
          : [
              ['Journal', journal.file] as const,
              ['Journal, SHA-256', html`<code>${journal.sha256}</code>`] as const,
            ]),
      ]),
      table({
        id: 'kernels-table',
        caption: 'What computed at each site',
        columns: ['Site', 'Kernel'],
        rows: result.sites.map(({ site, kernel }) => [site, kernel]),
      }),
    ],
  };
}
