import { SpanbeatError } from '#core/contract/errors.ts';
import { readSettings, type GivenSettings, type LogLevel, type ServerSettings } from '../settings.ts';

/** Options of `serve` as the command line gives them; what is absent is left to environment, file and default. */
export interface ServeOptions {
  settings?: string;
  bridges?: string[];
  data?: string;
  host?: string;
  port?: number;
  broker?: string;
  brokerHost?: string;
  brokerPort?: number;
  clientId?: string;
  user?: string;
  ca?: string;
  cert?: string;
  key?: string;
  root?: string;
  origin?: string[];
  journalHours?: number;
  journalGigabytes?: number;
  keepDays?: number;
  workers?: number;
  log?: LogLevel;
}

/** @throws SpanbeatError SETTINGS_INVALID */
export async function settingsOf(options: ServeOptions): Promise<ServerSettings> {
  const flags = flagsOf(options);
  const reading = await readSettings({ file: options.settings, flags, environment: process.env });
  if (!reading.ok) throw new SpanbeatError(reading.complaint);
  return reading.value;
}

function flagsOf(options: ServeOptions): GivenSettings {
  const { broker: url, brokerHost, brokerPort, clientId, user, ca, cert, key } = options;
  const flags = {
    data: options.data,
    bridges: options.bridges,
    root: options.root,
    broker: given({ url, host: brokerHost, port: brokerPort, clientId, user, ca, cert, key }),
    web: given({ host: options.host, port: options.port, origins: options.origin }),
    journal: given({ hours: options.journalHours, gigabytes: options.journalGigabytes }),
    retention: given({ keepAllDays: options.keepDays }),
    workers: options.workers,
    log: options.log,
  };
  return given(flags) ?? {};
}

type Given<T> = { [Key in keyof T]?: Exclude<T[Key], undefined> };

/** The fields that were given; undefined where none was. */
function given<T extends object>(fields: T): Given<T> | undefined {
  const entries = Object.entries(fields).filter(([, value]) => value !== undefined);
  return entries.length === 0 ? undefined : (Object.fromEntries(entries) as Given<T>);
}
