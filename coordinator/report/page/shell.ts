import { createHash } from 'node:crypto';
import { type Content, html, Markup } from './markup.js';
import { STYLE } from './style.js';

const digest = (text: string): string =>
  `'sha256-${createHash('sha256').update(text, 'utf8').digest('base64')}'`;

/** What the pages may load and run, as a content security policy: our style, by its digest; `script` likewise. */
export function contentPolicy(script: string | null): string {
  return [
    "default-src 'none'",
    `style-src ${digest(STYLE)}`,
    'img-src data:',
    "base-uri 'none'",
    ...(script === null
      ? ["form-action 'self'"]
      : [`script-src ${digest(script)}`, "connect-src 'self'", "form-action 'self'"]),
  ].join('; ');
}

export interface Shell {
  readonly title: string;
  /** Under the title: what kind of page it is. */
  readonly kind: string;
  readonly meta: Content;
  readonly contents: readonly { readonly id: string; readonly heading: string }[];
  readonly main: Content;
  readonly footer: Content;
  readonly script: string | null;
}

/** A whole document, with nothing in it that is loaded from elsewhere. */
export function documentOf({ title, kind, meta, contents, main, footer, script }: Shell): string {
  const nav =
    contents.length === 0
      ? null
      : html`<nav class="contents" aria-label="Contents"><ol>${contents.map(({ id, heading }) => html`<li><a href="#${id}">${heading}</a></li>`)}</ol></nav>\n`;
  return html`<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="${contentPolicy(script)}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark">
<meta name="referrer" content="no-referrer">
<title>${title}: ${kind}</title>
<link rel="icon" href="data:,">
<style>${new Markup(STYLE)}</style>
</head>
<body>
<a class="skip" href="#main">Go to the content</a>
<div class="page">
<header><p class="kind">${kind}</p><h1>${title}</h1>${meta}</header>
<div${nav === null ? null : html` class="columns"`}>
${nav}<main id="main" tabindex="-1">
${main}</main>
</div>
<footer>${footer}</footer>
</div>
${script === null ? null : html`<script>${new Markup(script)}</script>\n`}</body>
</html>
`.text;
}
