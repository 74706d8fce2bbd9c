import { minuteOf } from './figures.js';
import { type Content, html } from './markup.js';
import { table } from './parts.js';
import { documentOf } from './shell.js';

/** The pages around the report: signing in, the runs there are, and what went wrong. */

export interface ListedRun {
  readonly run: string;
  readonly title: string;
  readonly state: 'waiting' | 'running' | 'ended';
  readonly outcome: string | null;
  readonly round: number;
  readonly submittedAt: string;
  readonly hasReport: boolean;
}

const signOut = html`<form method="post" action="/sign-out"><button>Sign out</button></form>`;

/** All runs, the newest first. */
export function runsPage(runs: readonly ListedRun[]): string {
  const rows = [...runs]
    .reverse()
    .map((one) => [
      html`<a href="/runs/${one.run}">${one.run}</a>`,
      one.title,
      minuteOf(one.submittedAt),
      stateWords(one),
      one.hasReport
        ? html`<a href="/runs/${one.run}/report">Report<span class="unseen"> of ${one.run}</span></a>`
        : '',
    ]);
  return documentOf({
    title: 'Runs',
    kind: 'commonfit coordinator',
    meta: null,
    contents: [],
    main: html`<section id="runs">${
      rows.length === 0
        ? html`<p>No run has been submitted.</p>`
        : table({
            id: 'runs-table',
            caption: 'Runs, the newest first',
            columns: ['Run', 'Title', 'Submitted', 'State', 'Report'],
            rows,
          })
    }</section>\n`,
    footer: signOut,
    script: null,
  });
}

const stateWords = ({ state, outcome, round }: ListedRun): string =>
  state === 'running'
    ? `running, round ${round}`
    : state === 'ended'
      ? `ended as ${outcome ?? 'unknown'}`
      : 'waiting for its sites';

/** The form that an analyst's token goes into. `to`: a path of ours to go on to. */
export function signInPage(to: string, problem: string | null): string {
  const said: Content =
    problem === null ? null : html`<p class="problem" role="alert" id="problem">${problem}</p>`;
  return documentOf({
    title: 'Sign in',
    kind: 'commonfit coordinator',
    meta: null,
    contents: [],
    main: html`<section id="sign-in" aria-labelledby="sign-in-heading"><h2 id="sign-in-heading">With an analyst’s token</h2>${said}<form method="post" action="/sign-in"><input type="hidden" name="to" value="${to}"><label for="token">Token</label><input id="token" name="token" type="password" required autocomplete="off" spellcheck="false"${problem === null ? null : html` aria-describedby="problem" aria-invalid="true"`}><button>Sign in</button></form><p class="caption">It is kept in this browser’s session for twelve hours at most and never in an address. The coordinator writes the first one to analyst.token in its state folder.</p></section>\n`,
    footer: html`<p>Looking only: runs are submitted and cancelled with the command commonfit.</p>`,
    script: null,
  });
}

/** A page that says why there is nothing to see. */
export const noticePage = (title: string, said: string): string =>
  documentOf({
    title,
    kind: 'commonfit coordinator',
    meta: null,
    contents: [],
    main: html`<section id="notice"><p>${said}</p><p><a href="/">All runs</a></p></section>\n`,
    footer: null,
    script: null,
  });
