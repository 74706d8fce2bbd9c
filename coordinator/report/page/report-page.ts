import { auditSection, cautionsSection, certificateSection, leftSection } from './closing.js';
import { coefficientsSection } from './coefficients.js';
import { comparisonSection } from './comparison.js';
import { convergenceSection } from './convergence.js';
import { minuteOf } from './figures.js';
import { glanceMarkup } from './glance.js';
import type { ReportInput } from './input.js';
import { html } from './markup.js';
import { movedSection } from './moved.js';
import { type Section, sectionMarkup } from './parts.js';
import { pathSection } from './path.js';
import { qualitySection } from './quality.js';
import { questionSection } from './question.js';
import { documentOf } from './shell.js';
import { findingsSection, sitesSection } from './sites.js';
import { marginsSection, termTestsSection } from './tests-and-margins.js';

const SECTIONS: readonly ((input: ReportInput) => Section | null)[] = [
  questionSection,
  sitesSection,
  findingsSection,
  coefficientsSection,
  termTestsSection,
  marginsSection,
  movedSection,
  convergenceSection,
  pathSection,
  comparisonSection,
  qualitySection,
  certificateSection,
  leftSection,
  cautionsSection,
  auditSection,
];

/** `report.html`: one file that holds everything it shows, without a script. Equal input gives equal bytes. */
export function reportPage(input: ReportInput): string {
  const sections = SECTIONS.flatMap((make) => make(input) ?? []);
  const { run, submittedAt, endedAt, specification, result } = input;
  return documentOf({
    title: specification.title,
    kind: 'Report of a common fit',
    meta: html`<p class="meta">Run ${run}, submitted ${minuteOf(submittedAt)}, ended ${minuteOf(endedAt)}.</p>`,
    contents: [
      { id: 'verdict', heading: 'At a glance' },
      ...sections.map(({ id, heading }) => ({ id, heading })),
    ],
    main: [glanceMarkup(input), sections.map(sectionMarkup)],
    footer: html`<p>Made with ${result.software}. The full digits are in result.json and coefficients.csv beside this file.</p>`,
    script: null,
  });
}
