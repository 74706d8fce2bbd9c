import closeWithGrace from 'close-with-grace';
import { Command, InvalidArgumentError, Option } from 'commander';
import { type ServiceOptions, serviceSettings } from '../service/settings.js';
import { acting, withTail } from './action.js';
import { EXIT } from './exit-codes.js';
import { complain, ending, sayEnding } from './terminal.js';

export const STATE_DEFAULT = serviceSettings.shape.state.parse(undefined);
const LISTEN_DEFAULT = '127.0.0.1:7443';
/** How long open runs may take to bring their journals to rest when the service is told to stop. Milliseconds. */
const STOP_GRACE_MS = 10_000;

export function serveCommand(): Command {
  const command = new Command('serve')
    .description('run the coordinator: sites connect to it, analysts hand it fit specifications')
    .addOption(
      new Option('--listen <address>', 'host and port; port 0 takes a free one')
        .argParser(listenAddress)
        .default(listenAddress(LISTEN_DEFAULT), LISTEN_DEFAULT),
    )
    .option('--state <folder>', 'tokens, runs and journals', STATE_DEFAULT)
    .option('--tls-cert <file>', 'certificate chain, PEM; goes with --tls-key')
    .option('--tls-key <file>', 'its private key, PEM')
    .option(
      '--client-ca-file <file>',
      'let in only who shows a certificate of this authority, PEM, that names the site or analyst; needs --tls-cert',
    )
    .option('--plain-text', 'no TLS off loopback, where something in front of it does TLS')
    .addOption(mostOption('--running-most', 'runs at once; others wait their turn', 'runningMost'))
    .addOption(mostOption('--links-most', 'workers linked at once', 'linksMost'))
    .addOption(
      mostOption(
        '--connections-per-address-most',
        'connections of one address at once, linked workers not counted; raise it behind a proxy',
        'connectionsPerAddressMost',
      ),
    )
    .addOption(
      new Option('--log-level <level>', 'of the operational log on standard error')
        .choices(serviceSettings.shape.logLevel.unwrap().options)
        .default('info'),
    )
    .addOption(
      new Option('--log <form>', 'JSON objects, or sentences for people')
        .choices(serviceSettings.shape.log.unwrap().options)
        .default('json'),
    )
    .action(acting(serve));
  return withTail(command, {
    examples: [
      'commonfit serve',
      'commonfit serve --listen 0.0.0.0:7443 --tls-cert chain.pem --tls-key key.pem --state /var/lib/commonfit',
    ],
    exits: [EXIT.machine],
    more: 'At its first start it writes an analyst token to analyst.token in the state folder. SIGINT or SIGTERM stops it; runs that are under way go on from their journals when it is started again.',
  });
}

interface ServeOptions {
  readonly listen: { host: string; port: number };
  readonly state: string;
  readonly tlsCert?: string;
  readonly tlsKey?: string;
  readonly clientCaFile?: string;
  readonly plainText?: true;
  readonly runningMost: number;
  readonly linksMost: number;
  readonly connectionsPerAddressMost: number;
  readonly logLevel: ServiceOptions['logLevel'];
  readonly log: ServiceOptions['log'];
}

async function serve(options: ServeOptions): Promise<number> {
  if ((options.tlsCert === undefined) !== (options.tlsKey === undefined)) {
    complain('--tls-cert and --tls-key go together: give both, or neither.');
    return EXIT.usage;
  }
  if (options.clientCaFile !== undefined && options.tlsCert === undefined) {
    complain('--client-ca-file needs --tls-cert and --tls-key: certificates are asked for over TLS only.');
    return EXIT.usage;
  }
  // Loaded here: the other commands start faster without it.
  const { startService } = await import('../service/service.js');
  const started = await startService({
    state: options.state,
    host: options.listen.host,
    port: options.listen.port,
    ...(options.tlsCert === undefined ? {} : { certFile: options.tlsCert }),
    ...(options.tlsKey === undefined ? {} : { keyFile: options.tlsKey }),
    ...(options.clientCaFile === undefined ? {} : { clientCaFile: options.clientCaFile }),
    plainText: options.plainText === true,
    runningMost: options.runningMost,
    linksMost: options.linksMost,
    connectionsPerAddressMost: options.connectionsPerAddressMost,
    logLevel: options.logLevel,
    log: options.log,
  });
  if (!started.ok) return sayEnding(ending(EXIT.machine, [started.failure]).ending, false);
  process.stdout.write(`The coordinator is at ${started.value.address}, its state in ${options.state}\n`);
  await new Promise<void>((resolve) => {
    closeWithGrace({ delay: STOP_GRACE_MS }, async () => {
      await started.value.close();
      resolve();
    });
  });
  return EXIT.ok;
}

/** A limit of `serviceSettings`, with its default. */
function mostOption(
  flag: string,
  description: string,
  setting: 'runningMost' | 'linksMost' | 'connectionsPerAddressMost',
): Option {
  const schema = serviceSettings.shape[setting];
  return new Option(`${flag} <count>`, description).default(schema.parse(undefined)).argParser((text) => {
    const parsed = schema.safeParse(/^\d+$/.test(text) ? Number(text) : text);
    if (parsed.success) return parsed.data;
    throw new InvalidArgumentError('It is a whole number of at least 1.');
  });
}

/** `HOST:PORT`, with an IPv6 address in brackets. */
function listenAddress(text: string): { host: string; port: number } {
  const found = /^(?:\[([0-9a-f:.]+)\]|([^:[\]\s]+)):(\d{1,5})$/i.exec(text);
  const port = Number(found?.[3]);
  const host = found?.[1] ?? found?.[2];
  if (host === undefined || !serviceSettings.shape.port.safeParse(port).success) {
    throw new InvalidArgumentError('It is a host and a port, such as 127.0.0.1:7443 or [::1]:7443.');
  }
  return { host, port };
}
