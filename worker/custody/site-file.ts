import { dirname, resolve } from 'node:path';
import type { z } from 'zod';
import type { LeaveKind } from '../../protocol/messages/survey.js';
import { checkDocument } from '../../protocol/specification/issues.js';
import { type Parsed, readYaml } from '../../protocol/specification/yaml-document.js';
import type { TableSource } from '../source/table.js';
import { siteDocument, type WrittenTable } from './site-schema.js';

/** A checked site file: what the custodian's worker reads, whom it talks to, and what may leave. Paths are absolute. */
export interface SiteFile {
  readonly site: string;
  readonly coordinator: {
    /** `ws://` or `wss://`, as written. */
    readonly url: string;
    readonly tokenFile: string;
    /** Certificate authority to trust instead of the platform's; null: the platform's. */
    readonly caFile: string | null;
    /** Certificate of this site and its key; null: none is shown. */
    readonly pairFiles: { readonly certificate: string; readonly key: string } | null;
  };
  readonly table: TableSource;
  /** This worker's share of the rows, `index` from 1. */
  readonly shard: { readonly index: number; readonly of: number };
  readonly policy: Policy;
  readonly file: string;
}

export interface Policy {
  /** Columns a specification may use, response and weights among them. */
  readonly columns: readonly string[] | 'any';
  /** Least rows a fit must use at this site. */
  readonly rowsLeast: number;
  /** Kinds of answer that may leave. */
  readonly leave: readonly LeaveKind[];
  /** Curvature matrices a fit; 0 none. */
  readonly curvatureMost: number | 'any';
  /** Numbers a run, of all kinds together. */
  readonly numbersMost: number | 'any';
  readonly roundsMost: number | 'any';
  /** listed: only specifications whose digest the custodian has approved. */
  readonly approvals: 'listed' | 'any';
}

/** Reads `NAME.site.yaml`. Relative paths are taken from the file's folder; all that is wrong is reported. */
export function parseSiteFile(text: string, file: string): Parsed<SiteFile> {
  const source = readYaml(text, file);
  if (!source.ok) return source;
  const document = checkDocument(siteDocument, source.value);
  return document.ok ? { ok: true, value: siteFileFrom(document.value, resolve(file)) } : document;
}

function siteFileFrom(document: z.output<typeof siteDocument>, file: string): SiteFile {
  const folder = dirname(file);
  const { coordinator, policy } = document;
  const caFile = coordinator['ca-file'];
  const certificate = coordinator['certificate-file'];
  const key = coordinator['key-file'];
  return {
    site: document.site,
    coordinator: {
      url: coordinator.url,
      tokenFile: resolve(folder, coordinator['token-file']),
      caFile: caFile === undefined ? null : resolve(folder, caFile),
      pairFiles:
        certificate === undefined || key === undefined
          ? null
          : { certificate: resolve(folder, certificate), key: resolve(folder, key) },
    },
    table: tableFrom(document.table, folder),
    shard: { index: document.shard.index, of: document.shard.of },
    policy: {
      columns: policy.columns,
      rowsLeast: policy['rows-least'],
      leave: policy.leave,
      curvatureMost: policy['curvature-most'],
      numbersMost: policy['numbers-most'],
      roundsMost: policy['rounds-most'],
      approvals: policy.approvals,
    },
    file,
  };
}

const tableFrom = (written: WrittenTable, folder: string): TableSource =>
  written.kind === 'query'
    ? { kind: 'query', query: written.text, folder }
    : { kind: written.kind, path: resolve(folder, written.text) };
