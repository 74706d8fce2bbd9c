import type { Interval } from '../../run/result-parts.js';
import { figure, percent, ratioFigures, reach, whole } from './figures.js';
import { fitStoodBy, type ReportInput, ratioName } from './input.js';
import { type Content, coded, html, type Markup } from './markup.js';
import { definitions, list } from './parts.js';
import { type Verdict, verdictOf } from './verdict.js';

/** Coefficients named at a glance. */
const NAMED_MOST = 4;

const TONES: Readonly<Record<Verdict['tone'], { readonly sign: string; readonly word: string }>> = {
  sound: { sign: '◆', word: 'Sound' },
  caution: { sign: '◇', word: 'With care' },
  unsound: { sign: '✕', word: 'Not to be relied on' },
};

/** The head of the page: the verdict, and the four questions a reader comes with. */
export function glanceMarkup(input: ReportInput): Markup {
  const { tone, head, sentences } = verdictOf(input.result);
  const { sign, word } = TONES[tone];
  const questions: [string, Content][] = [
    ['Can I trust this fit?', sentences.map((text) => html`<p>${coded(text)}</p>`)],
    ['What does it say?', tone === 'unsound' ? html`<p>Nothing that may be relied on.</p>` : sayings(input)],
    ['Do the sites agree?', agreement(input)],
    ['What left each site?', leaving(input)],
  ];
  return html`<section id="verdict" class="verdict ${tone}" aria-labelledby="verdict-heading"><p class="tone"><span aria-hidden="true">${sign}</span> ${word}</p><h2 id="verdict-heading">${head}</h2>${definitions(questions)}</section>\n`;
}

type Named = Interval & { readonly name: string };

function sayings({ specification, result }: ReportInput): Content {
  const { inference } = result;
  const ratio = ratioName(specification);
  const tested = inference?.coefficients.filter(({ name }) => name !== '(intercept)') ?? [];
  const known: readonly Named[] = tested.length > 0 ? tested : (inference?.debiased ?? []);
  if (known.length === 0) {
    const fit = fitStoodBy(result);
    const few = fit === null ? 'No fit is stood by.' : 'The coefficients are below.';
    return html`<p>${few} No interval is given for them.</p>`;
  }
  const size = ({ estimate, standardError }: Named): number => Math.abs(estimate / standardError) || 0;
  const strongest = [...known].sort((a, b) => size(b) - size(a));
  const items = strongest.slice(0, NAMED_MOST).map(({ name, estimate, lower, upper }) => {
    if (ratio === null)
      return html`<strong>${name}</strong>: ${figure(estimate)} (${reach(lower, upper)}) on ${specification.response.column}, for one unit more or against the baseline.`;
    const [value, interval] = ratioFigures(Math.exp(lower), Math.exp(estimate), Math.exp(upper));
    return html`<strong>${name}</strong>: ${ratio} ${value} (${interval}).`;
  });
  const more = known.length - items.length;
  return [
    html`<p>The clearest of ${whole(known.length)}, others held equal, with ${percent(inference?.level)} intervals${tested.length > 0 ? '' : ', de-biased'}:</p>`,
    list(items),
    more > 0 ? html`<p><a href="#coefficients">All coefficients</a></p>` : null,
  ];
}

function agreement({ result, specification }: ReportInput): Content {
  const { comparison } = result;
  if (comparison !== null) return comparison.words.map((text) => html`<p>${coded(text)}</p>`);
  if (!specification.report.compareSites) {
    return html`<p>Not asked: add <code>compare-sites</code> to <code>report</code> in the specification.</p>`;
  }
  return html`<p>It was asked and could not be told.</p>`;
}

function leaving({ result }: ReportInput): Content {
  const sent = result.numbersSent;
  if (sent.length === 0) return html`<p>Nothing.</p>`;
  const most = sent.reduce((a, b) => (b.up > a.up ? b : a));
  const least = Math.min(...sent.map(({ up }) => up));
  const range = least === most.up ? whole(most.up) : `${whole(least)} to ${whole(most.up)}`;
  const whom = least === most.up ? 'from each site' : `from each site, the most from ${most.site}`;
  return html`<p>${range} numbers ${whom}: sums over rows, none of the rows themselves. <a href="#left">Which kinds</a></p>`;
}
