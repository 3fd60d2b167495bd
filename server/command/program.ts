import { Command, CommanderError, InvalidArgumentError, Option } from 'commander';
import { sentence } from '#core/contract/errors.ts';
import { EARLIEST_MICROS, LATEST_MICROS, type Micros } from '#core/contract/time.ts';
import { calendarMicros } from '../exchange/time-text.ts';
import { DEFAULT_WEB, LOG_LEVELS, type DemonstrationSettings } from '../settings.ts';
import { EXIT, type Console } from './outcome.ts';
import { SCHEMAS } from './schema.ts';
import { settingsOf, type ServeOptions } from './serve.ts';

/** Bodies are loaded when they are called for: help and usage errors need none of them. */
export interface Program {
  /** @returns exit code; null where the command goes on running, as a server does */
  run(words: readonly string[]): Promise<number | null>;
}

const EXIT_CODES = `
Exit codes:
  0  good
  1  something is wrong in what was given to read
  2  the command was not understood
  3  a file, port, disk or neighbour failed

Results go to standard output, everything else to standard error. Each complaint is one line that begins with its code.
Spanbeat is advisory: it has no authority over train movement. Limits come from the code and the responsible engineer.`;

/** The command table. */
export function createProgram(version: string, console: Console): Program {
  let exit: number | null = EXIT.good;
  const told: string[] = [];
  const program = new Command('spanbeat')
    .description('A real-time monitor for instrumented railway bridges.')
    .version(version, '-V, --version', 'print the version')
    .helpOption('-h, --help', 'explain a command')
    .helpCommand('help [command]', 'explain a command')
    .addHelpText('after', EXIT_CODES)
    .showSuggestionAfterError(true);
  const set = (code: number | null): void => {
    exit = code;
  };

  addServe(program, set);
  addDemo(program, set);
  addAnalyse(program, console, set);
  addSimulate(program, console, set);
  program
    .command('check')
    .description('Read bridge definitions and tell all that is wrong in them.')
    .argument('<file...>', 'YAML files')
    .action(async (files: string[]) => {
      const { check } = await import('./check.ts');
      set(await check(files, console));
    });
  program
    .command('schema')
    .description('Print a JSON Schema.')
    .addArgument(program.createArgument('<name>', 'what it describes').choices(Object.keys(SCHEMAS)))
    .action(async (name: string) => {
      const { schema } = await import('./schema.ts');
      set(await schema(name, console));
    });

  for (const command of [program, ...program.commands]) {
    command.exitOverride().configureOutput({
      writeOut: (text) => void console.out(text),
      writeErr: (text) => console.err(text),
      outputError: (text) => void told.push(text),
    });
  }
  return {
    async run(words) {
      if (words.length === 0) {
        console.err(program.helpInformation());
        return EXIT.usage;
      }
      try {
        await program.parseAsync(words, { from: 'user' });
      } catch (error) {
        if (!(error instanceof CommanderError)) throw error;
        if (error.exitCode === 0) return EXIT.good;
        const detail = (told[0] ?? error.message)
          .replace(/^error: /, '')
          .trim()
          .replaceAll(/\s*\n\s*/g, ' ');
        console.err(`${sentence({ code: 'USAGE', detail })}\n`);
        return EXIT.usage;
      }
      return exit;
    },
  };
}

type SetExit = (code: number | null) => void;

function addServe(program: Command, set: SetExit): void {
  program
    .command('serve')
    .description('Run the server: take samples over MQTT, find and measure passages, raise alarms, show all of it.')
    .option('-s, --settings <file>', 'YAML file of settings; options here go before it')
    .option('-b, --bridges <path...>', 'definition files, or folders of them (bridges)')
    .option('-d, --data <folder>', 'journal, history and archive (.spanbeat/data)')
    .option('--host <address>', 'address of the page; others than 127.0.0.1 are open to the network (127.0.0.1)')
    .option('-p, --port <number>', `port of the page (${DEFAULT_WEB.port})`, port)
    .option('--broker <url>', 'an outside MQTT broker, mqtt:// or mqtts://; without it one is embedded')
    .option('--broker-host <address>', 'address of the embedded broker (127.0.0.1)')
    .option('--broker-port <number>', 'port of the embedded broker (1883, or the next that is free)', port)
    .option('--client-id <name>', 'under which the outside broker keeps the session')
    .option('--user <name>', 'for the outside broker; its password is taken from SPANBEAT_MQTT_PASSWORD')
    .option('--ca <file>', "PEM: authority that signed the broker's certificate")
    .option('--cert <file>', 'PEM: certificate of this client')
    .option('--key <file>', 'PEM: its key')
    .option('--root <topic>', 'first level of the topics (spanbeat)')
    .option('--origin <origin...>', 'other pages that may open the live socket')
    .option('--journal-hours <hours>', 'samples are kept for replay so long (72)', positive)
    .option('--journal-gigabytes <size>', 'and at most so much of them (20)', positive)
    .option('--keep-days <days>', 'wave forms of passages below all limits are kept so long (30)', wholeFromZero)
    .option('--workers <number>', 'threads that run pipelines (one a bridge, at most 4 or one a core)', whole)
    .addOption(new Option('--log <level>', 'how much is told (info)').choices(LOG_LEVELS))
    .action(async (options: ServeOptions) => {
      const settings = await settingsOf(options);
      const { serve } = await import('../app.ts');
      await serve(settings);
      set(null);
    });
}

function addDemo(program: Command, set: SetExit): void {
  program
    .command('demo')
    .description('Run a server over three invented bridges with simulated loggers and trains.')
    .option('-d, --data <folder>', 'journal, history and archive of the demonstration', '.spanbeat/demo')
    .option('--host <address>', 'address of the page', DEFAULT_WEB.host)
    .option('-p, --port <number>', 'port of the page', port, DEFAULT_WEB.port)
    .option('--seed <number>', 'other trains, other noise', whole, 1)
    .option('--past-days <days>', 'days before now to look back on, measured at the first start', wholeFromZero, 7)
    .addOption(new Option('--log <level>', 'how much is told').choices(LOG_LEVELS).default('warn'))
    .action(async ({ data: dataFolder, log: logLevel, ...options }: DemoOptions) => {
      const { demonstration } = await import('../app.ts');
      await demonstration({ ...options, dataFolder, logLevel });
      set(null);
    });
}

type DemoOptions = Omit<DemonstrationSettings, 'dataFolder' | 'logLevel'> & {
  data: string;
  log: DemonstrationSettings['logLevel'];
};

function addAnalyse(program: Command, console: Console, set: SetExit): void {
  program
    .command('analyse')
    .description('Run the pipeline of the server over recordings, CSV or Parquet, and print the passages.')
    .argument('<recording...>', 'files of one bridge: of several rates, or of several hours')
    .requiredOption('-b, --bridge <file>', 'definition of the bridge, or one of ottermere, fennick, sallow')
    .option('--whole', 'measure all of it as one event, train or not', false)
    .addOption(
      new Option('-f, --format <form>', 'one JSON a line, or a table').choices(['jsonl', 'table']).default('jsonl'),
    )
    .option('--start <time>', 'ISO 8601 or Unix seconds: time of zero in a recording that counts from there', time)
    .option('--definition-version <number>', 'version that the passages name (1, or that of a stored passage)', whole)
    .addHelpText(
      'after',
      `
A text recording has a header, a column called time, and one column a sensor, named by its id or as its logger names it
(loggers.channels). Tab, semicolon or comma; with the first two a decimal comma is taken. Time: seconds, Unix epoch in s,
ms, µs or ns, or ISO 8601 (UTC unless it says otherwise). "A1 [g]" holds values in g; "A1" holds what the logger sent.
A level that is passed without a train is printed too, its phases found by "live level", and said on standard error.
A wave form out of the archive (Parquet) is measured in its own window: the same definition gives the same bits.`,
    )
    .action(async (files: string[], options: AnalyseOptions) => {
      const { analyse } = await import('./analyse.ts');
      const { bridge, whole: asOne, format, start = null, definitionVersion = null } = options;
      set(await analyse(files, { bridge, whole: asOne, format, startMicros: start, definitionVersion }, console));
    });
}

interface AnalyseOptions {
  bridge: string;
  whole: boolean;
  format: 'jsonl' | 'table';
  start?: Micros;
  definitionVersion?: number;
}

function addSimulate(program: Command, console: Console, set: SetExit): void {
  program
    .command('simulate')
    .description('Let trains cross a bridge, to a CSV file or to an MQTT broker, with the truth beside.')
    .requiredOption('-b, --bridge <file>', 'definition, or one of ottermere, fennick, sallow')
    .requiredOption('--to <where>', 'file, - for standard output, or mqtt://host:port')
    .addOption(
      new Option('--as <form>', 'of a file: CSV, or a SenML pack (RFC 8428, JSON) a line, to be published line by line')
        .choices(['csv', 'senml'])
        .default('csv'),
    )
    .option('--logger <id>', 'of SenML: the one logger whose sensors are written, where the bridge has several')
    .addOption(new Option('-t, --train <type>', 'what crosses').choices(TRAIN_CHOICES).default('mixed'))
    .option('-n, --count <number>', 'how many', whole, 3)
    .option('--speed <m/s>', 'of all of them; by their type where absent', speed)
    .addOption(
      new Option('--direction <way>', 'along the chainage').choices(['rising', 'falling', 'both']).default('both'),
    )
    .option('--seed <number>', 'the same seed gives the same samples', whole, 1)
    .option('--start <time>', 'ISO 8601 or Unix seconds: time of the first sample', time)
    .option('--fast', 'as fast as it is taken (the default)', false)
    .option('--real-time', 'keep pace with the clock', false)
    .option('--faults', 'let loggers lose, double and delay blocks, restart, and have a clock that is off', false)
    .option('--truth <file>', 'where the truth goes; beside a CSV file where absent')
    .option('--root <topic>', 'first level of the topics', 'spanbeat')
    .option('--username <name>', 'for the broker')
    .addOption(new Option('--password <word>', 'for the broker').env('SPANBEAT_MQTT_PASSWORD'))
    .action(async (options: SimulateOptions, command: Command) => {
      if (options.fast && options.realTime) command.error('error: --fast and --real-time exclude each other');
      const { simulate } = await import('./simulate.ts');
      const { speed: speedMs = null, start: startMicros = null, truth = null, logger = null } = options;
      set(await simulate({ ...options, speedMs, startMicros, truth, logger }, console));
    });
}

const TRAIN_CHOICES = [
  'mixed',
  'intercity',
  'regional multiple unit',
  'block freight',
  'light engine',
  'tamping machine',
] as const;

interface SimulateOptions {
  bridge: string;
  to: string;
  as: 'csv' | 'senml';
  logger?: string;
  train: (typeof TRAIN_CHOICES)[number];
  count: number;
  speed?: number;
  direction: 'rising' | 'falling' | 'both';
  seed: number;
  start?: Micros;
  fast: boolean;
  realTime: boolean;
  faults: boolean;
  truth?: string;
  root: string;
  username?: string;
  password?: string;
}

// values of options

function port(text: string): number {
  const value = Number(text);
  if (/^\d+$/.test(text) && value <= 65_535) return value;
  throw new InvalidArgumentError('Expected a port, 0 to 65535.');
}

function whole(text: string): number {
  const value = Number(text);
  if (/^\d+$/.test(text) && value >= 1 && value <= 1_000_000) return value;
  throw new InvalidArgumentError('Expected a whole number, 1 to 1000000.');
}

function wholeFromZero(text: string): number {
  return text === '0' ? 0 : whole(text);
}

function positive(text: string): number {
  const value = Number(text);
  if (text.trim() !== '' && Number.isFinite(value) && value > 0) return value;
  throw new InvalidArgumentError('Expected a number above 0.');
}

function speed(text: string): number {
  const value = positive(text);
  if (value >= 1 && value <= 150) return value;
  throw new InvalidArgumentError('Expected 1 to 150 m/s.');
}

function time(text: string): Micros {
  const bytes = new TextEncoder().encode(text);
  const dated = /^\d{4}-\d\d-\d\d$/.test(text) ? new TextEncoder().encode(`${text}T00:00:00Z`) : bytes;
  const calendar = calendarMicros(dated, 0, dated.length);
  const micros = Number.isNaN(calendar) ? Math.round(Number(text) * 1e6) : calendar;
  if (micros >= EARLIEST_MICROS && micros <= LATEST_MICROS) return micros;
  throw new InvalidArgumentError('Expected ISO 8601, as 2026-12-01T05:12:33Z, or Unix seconds, from 2000 to 2100.');
}
