import { readFile } from 'node:fs/promises';
import { resolve } from 'node:path';
import { Type, type Static } from 'typebox';
import { accept, refuse, type Result } from '#core/contract/errors.ts';
import { fieldName, shapeProblems, type ShapeProblem } from '#core/contract/shape.ts';
import type { RetentionRules } from './history/retention.ts';
import type { EmbeddedSettings } from './ingest/broker.ts';
import type { OutsideSettings } from './ingest/client.ts';
import type { IngestSettings } from './ingest/ingest.ts';
import { placed, readYaml } from './yaml-text.ts';

export const LOG_LEVELS = ['debug', 'info', 'warn', 'error', 'silent'] as const;
export type LogLevel = (typeof LOG_LEVELS)[number];

/** Everything that can be set about a server, complete. */
export interface ServerSettings {
  /** Definition files, or folders of them. */
  bridges: string[];
  /** Journal, snapshots, history and archive live here. */
  dataFolder: string;
  /** Of the page. 127.0.0.1 keeps it to this machine. */
  host: string;
  port: number;
  broker: EmbeddedSettings | OutsideBroker;
  /** First level of the topics. */
  root: string;
  /** Origins of other pages that may act and open the live socket. */
  allowedOrigins: string[];
  journal: { maxHours: number; maxBytes: number };
  retention: Partial<RetentionRules>;
  /** Threads that run pipelines; all cores but one where absent. */
  workers?: number;
  logLevel: LogLevel;
}

/** An outside broker, with its PEM files still to be read. */
export type OutsideBroker = Omit<OutsideSettings, 'ca' | 'cert' | 'key'> & {
  caFile?: string;
  certFile?: string;
  keyFile?: string;
};

/** What can be set about the demonstration. */
export interface DemonstrationSettings {
  dataFolder: string;
  host: string;
  port: number;
  /** Other trains, other noise. */
  seed: number;
  /** Days of measured past that the first start makes. */
  pastDays: number;
  logLevel: LogLevel;
}

const Name = Type.String({ minLength: 1, maxLength: 1000 });
const Port = Type.Integer({ minimum: 0, maximum: 65_535 });

/** The settings file (YAML), and what flags and environment put over it. Whatever is absent has its default. */
export const GivenSettings = Type.Object(
  {
    data: Type.Optional(Name),
    bridges: Type.Optional(Type.Array(Name, { minItems: 1, maxItems: 1000 })),
    root: Type.Optional(
      Type.String({
        pattern: '^[^+#/\\s]{1,64}$',
        description: 'one topic level: up to 64 characters, no +, #, / or space',
      }),
    ),
    broker: Type.Optional(
      Type.Object(
        {
          /** An outside broker; without it the server runs one of its own on `host` and `port`. */
          url: Type.Optional(
            Type.String({
              pattern: '^mqtts?://[^\\s/]+$',
              description: 'mqtt:// or mqtts:// with host and port, no path',
            }),
          ),
          user: Type.Optional(Name),
          password: Type.Optional(Name),
          clientId: Type.Optional(
            Type.String({
              pattern: '^[A-Za-z0-9_.-]{1,64}$',
              description: 'up to 64 letters, digits, dots, dashes or underscores',
            }),
          ),
          protocol: Type.Optional(Type.Union([Type.Literal(4), Type.Literal(5)])),
          /** PEM files. */
          ca: Type.Optional(Name),
          cert: Type.Optional(Name),
          key: Type.Optional(Name),
          host: Type.Optional(Name),
          port: Type.Optional(Port),
        },
        { additionalProperties: false },
      ),
    ),
    web: Type.Optional(
      Type.Object(
        {
          host: Type.Optional(Name),
          port: Type.Optional(Port),
          origins: Type.Optional(
            Type.Array(
              Type.String({
                pattern: '^https?://[^/\\s]+$',
                description: 'http:// or https:// with host and port, no path',
              }),
              { maxItems: 32 },
            ),
          ),
        },
        { additionalProperties: false },
      ),
    ),
    journal: Type.Optional(
      Type.Object(
        {
          hours: Type.Optional(Type.Number({ minimum: 0.1, maximum: 10_000 })),
          gigabytes: Type.Optional(Type.Number({ minimum: 0.01, maximum: 100_000 })),
        },
        { additionalProperties: false },
      ),
    ),
    retention: Type.Optional(
      Type.Object(
        {
          keepAllDays: Type.Optional(Type.Integer({ minimum: 0, maximum: 36_500 })),
          keepHighestPerDay: Type.Optional(Type.Integer({ minimum: 0, maximum: 1000 })),
        },
        { additionalProperties: false },
      ),
    ),
    workers: Type.Optional(Type.Integer({ minimum: 1, maximum: 256 })),
    log: Type.Optional(
      Type.Union([
        Type.Literal('debug'),
        Type.Literal('info'),
        Type.Literal('warn'),
        Type.Literal('error'),
        Type.Literal('silent'),
      ]),
    ),
  },
  { additionalProperties: false },
);
export type GivenSettings = Static<typeof GivenSettings>;

/** Variables of the environment that stand for settings; the broker's password is best given so. */
const VARIABLES: Readonly<Record<string, readonly string[]>> = {
  SPANBEAT_DATA: ['data'],
  SPANBEAT_ROOT: ['root'],
  SPANBEAT_BROKER: ['broker', 'url'],
  SPANBEAT_MQTT_USER: ['broker', 'user'],
  SPANBEAT_MQTT_PASSWORD: ['broker', 'password'],
  SPANBEAT_HOST: ['web', 'host'],
  SPANBEAT_PORT: ['web', 'port'],
  SPANBEAT_LOG: ['log'],
};

/** Settings whose values are not repeated in complaints: an address may hold a password too. */
const SECRET: ReadonlySet<string> = new Set(['password', 'url']);

export const DEFAULT_WEB = { host: '127.0.0.1', port: 8600 } as const;
const DEFAULT_DATA = '.spanbeat/data';
const DEFAULT_JOURNAL = { hours: 72, gigabytes: 20 } as const;

export interface SettingsSources {
  /** Path of a settings file. */
  file?: string | undefined;
  /** From the command line; goes before the environment, which goes before the file. */
  flags?: GivenSettings;
  environment?: Readonly<Record<string, string | undefined>>;
}

/** Puts the settings together. @returns SETTINGS_INVALID where one does not meet its expectation */
export async function readSettings({
  file,
  flags = {},
  environment = {},
}: SettingsSources): Promise<Result<ServerSettings>> {
  const fromFile = file === undefined ? accept({}) : await readFileSettings(file);
  if (!fromFile.ok) return fromFile;
  const fromEnvironment = environmentSettings(environment);
  for (const [source, given] of [
    ['environment', fromEnvironment],
    ['command line', flags],
  ] as const) {
    const complaint = complaintOf(given);
    if (complaint !== null) return refuse('SETTINGS_INVALID', complaint.detail, `${source}: ${complaint.field}`);
  }
  return accept(complete(merged(merged(fromFile.value, fromEnvironment), flags)));
}

function complete(given: GivenSettings): ServerSettings {
  const { journal, web, retention, workers } = given;
  return {
    bridges: (given.bridges ?? ['bridges']).map((path) => resolve(path)),
    dataFolder: resolve(given.data ?? DEFAULT_DATA),
    host: web?.host ?? DEFAULT_WEB.host,
    port: web?.port ?? DEFAULT_WEB.port,
    broker: brokerOf(given),
    root: given.root ?? 'spanbeat',
    allowedOrigins: web?.origins ?? [],
    journal: {
      maxHours: journal?.hours ?? DEFAULT_JOURNAL.hours,
      maxBytes: (journal?.gigabytes ?? DEFAULT_JOURNAL.gigabytes) * 1e9,
    },
    retention: retention ?? {},
    logLevel: given.log ?? 'info',
    ...(workers === undefined ? {} : { workers }),
  };
}

function brokerOf({ broker = {}, root = 'spanbeat' }: GivenSettings): ServerSettings['broker'] {
  const { url, host, port, user, password, protocol, clientId, ca, cert, key } = broker;
  const some = <K extends string, T>(name: K, value: T | undefined): Partial<Record<K, T>> =>
    value === undefined ? {} : ({ [name]: value } as Record<K, T>);
  if (url === undefined) return { kind: 'embedded', ...some('host', host), ...some('port', port) };
  return {
    kind: 'outside',
    url,
    clientId: clientId ?? `spanbeat-server-${root}`,
    ...some('username', user),
    ...some('password', password),
    ...some('protocol', protocol),
    ...some('caFile', ca),
    ...some('certFile', cert),
    ...some('keyFile', key),
  };
}

/** The broker's settings with its PEM files read. */
export async function ingestSettings(broker: ServerSettings['broker']): Promise<Result<IngestSettings>> {
  if (broker.kind === 'embedded') return accept(broker);
  const { caFile, certFile, keyFile, ...plain } = broker;
  const pem: { ca?: string; cert?: string; key?: string } = {};
  for (const [name, path] of [
    ['ca', caFile],
    ['cert', certFile],
    ['key', keyFile],
  ] as const) {
    if (path === undefined) continue;
    try {
      pem[name] = await readFile(path, 'utf8');
    } catch (failure) {
      return refuse('SETTINGS_INVALID', failure instanceof Error ? failure.message : String(failure), `${name} file`);
    }
  }
  return accept({ ...plain, ...pem });
}

async function readFileSettings(file: string): Promise<Result<GivenSettings>> {
  let text: string;
  try {
    text = await readFile(file, 'utf8');
  } catch (failure) {
    return refuse('SETTINGS_INVALID', failure instanceof Error ? failure.message : String(failure), file);
  }
  const reading = readYaml(text, file);
  if (!reading.ok) {
    const first = reading.complaints[0]!;
    return refuse('SETTINGS_INVALID', first.detail, first.where ?? file);
  }
  const { data, placeOf } = reading.value;
  const given = data ?? {};
  const complaint = complaintOf(given);
  if (complaint === null) return accept(given as GivenSettings);
  const place = placed(file, placeOf(complaint.path, complaint.atName));
  return refuse('SETTINGS_INVALID', `${complaint.field}: ${complaint.detail}`, place);
}

function environmentSettings(environment: Readonly<Record<string, string | undefined>>): GivenSettings {
  const given: Record<string, unknown> = {};
  for (const [variable, path] of Object.entries(VARIABLES)) {
    const text = environment[variable];
    if (text === undefined || text === '') continue;
    const value = path.at(-1) === 'port' && /^\d+$/.test(text) ? Number(text) : text;
    const [first, second] = path as [string, string?];
    if (second === undefined) given[first] = value;
    else given[first] = { ...(given[first] as Record<string, unknown> | undefined), [second]: value };
  }
  return given;
}

function complaintOf(given: unknown): (ShapeProblem & { field: string }) | null {
  const [first] = shapeProblems(GivenSettings, given).problems;
  if (first === undefined) return null;
  const secret = SECRET.has(String(first.path.at(-1)));
  const detail = secret ? first.detail.replace(/^found .*, expected /, 'expected ') : first.detail;
  return { ...first, detail, field: fieldName(first.path, 'settings') };
}

/** Two levels deep, the second over the first. */
function merged(under: GivenSettings, over: GivenSettings): GivenSettings {
  const result: Record<string, unknown> = { ...under };
  for (const [key, value] of Object.entries(over)) {
    const below = result[key];
    result[key] = isRecord(value) && isRecord(below) ? { ...below, ...value } : value;
  }
  return result;
}

const isRecord = (value: unknown): value is Record<string, unknown> =>
  typeof value === 'object' && value !== null && !Array.isArray(value);
