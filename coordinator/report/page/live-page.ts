import { minuteOf } from './figures.js';
import { LIVE_SCRIPT } from './live-script.js';
import { html } from './markup.js';
import { documentOf } from './shell.js';

/** The page of one run while it goes on, which follows its round log; it ends by pointing to the report. */
export function livePage({
  run,
  title,
  submittedAt,
}: {
  readonly run: string;
  readonly title: string;
  readonly submittedAt: string;
}): string {
  const picture = html`<svg id="gap" class="picture" viewBox="0 0 720 190" role="img" aria-labelledby="gap-title gap-description" hidden><title id="gap-title">Distance to the optimum, by round</title><desc id="gap-description">A line that falls towards the tolerance; the table of rounds has the numbers.</desc><path id="tolerance" class="tolerance" d=""/><path id="trace" class="trace" d=""/><path id="here" class="here" d="M0,-7L5,0L0,7L-5,0Z"/></svg>`;
  const table = html`<div class="wide" role="region" aria-labelledby="rounds-caption" tabindex="0"><table><caption id="rounds-caption">Rounds, the newest first</caption><thead><tr><th scope="col">Round</th><th scope="col">For</th><th scope="col" class="number">Relative distance</th><th scope="col" class="number">Took</th><th scope="col">Last to answer</th><th scope="col">Older answers stood in</th></tr></thead><tbody id="rounds"></tbody></table></div>`;
  return documentOf({
    title,
    kind: 'A run, as it goes on',
    meta: html`<p class="meta">Run ${run}, submitted ${minuteOf(submittedAt)}. <a href="/">All runs</a></p>`,
    contents: [],
    main: html`<section id="live" aria-labelledby="live-heading" data-log="/v1/runs/${run}/log"><h2 id="live-heading">Where it stands</h2><p id="status" role="status">Reading the round log.</p><p id="ended" hidden><a href="/runs/${run}/report">Read the report</a></p><dl><div><dt>State</dt><dd id="state">not known yet</dd></div><div><dt>Round</dt><dd id="round">none yet</dd></div><div><dt>Relative distance to the optimum</dt><dd id="distance">not known yet</dd></div><div><dt>Rows in all</dt><dd id="rows">not surveyed yet</dd></div><div><dt>Rung</dt><dd id="rung">not chosen yet</dd></div></dl>${picture}<h3>Sites</h3><ul id="sites"></ul>${table}<noscript><p>Without scripts this page stands still: follow the run with the command commonfit watch ${run}, or open <a href="/runs/${run}/report">its report</a> when it has ended.</p></noscript></section>\n`,
    footer: html`<p>The same is shown in a terminal by commonfit watch ${run}.</p>`,
    script: LIVE_SCRIPT,
  });
}
