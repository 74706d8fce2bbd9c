import { Command } from 'commander';
import { z } from 'zod';
import { acting, withTail } from './action.js';
import { type Analyst, type AnalystOptions, ask, withCoordinator } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { say, sayEnding } from './terminal.js';
import { trustOf } from './trust.js';

/** For the health check of a container or a service manager: no token is needed. */
export function healthCommand(): Command {
  const command = withCoordinator(
    new Command('health').description('ask the coordinator whether runs can go on; for service managers'),
  ).action(acting(health));
  return withTail(command, {
    examples: ['commonfit health --url https://localhost:7443 --ca-file ca.pem'],
    exits: [EXIT.unreachable, EXIT.untrusted],
    more: 'Ends with 4 where the coordinator does not answer, and where its runs stand still because the state folder cannot be written.',
  });
}

async function health(options: Pick<AnalystOptions, 'url' | 'caFile'>): Promise<number> {
  const trust = await trustOf(options);
  if (!trust.ok) return sayEnding(trust.ending, false);
  const nobody: Analyst = { url: options.url.replace(/\/+$/, ''), token: '', ...trust.value };
  const ready = await ask(nobody, 'GET', '/health/ready', z.object({ ready: z.literal(true) }));
  if (!ready.ok) return sayEnding(ready.ending, false);
  say(['Ready.']);
  return EXIT.ok;
}
