import type { SampleBlock } from '#core/contract/block.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import type { Micros } from '#core/contract/time.ts';
import type { Report } from '../report.ts';
import { startBroker, type EmbeddedSettings } from './broker.ts';
import { startClient, type OutsideSettings } from './client.ts';
import { decodeMessage } from './decode.ts';
import type { Journal, Position } from './journal.ts';
import type { Incoming, Link, LinkStatus, PublishOptions } from './link.ts';
import { addressOf, type Address, type Directory } from './topics.ts';

export type IngestSettings = EmbeddedSettings | OutsideSettings;

export interface LoggerStatus {
  bridge: string;
  logger: string;
  /** As the logger wrote it; at most 1 KiB of it. A last will comes here too. */
  text: string;
  receivedMicros: Micros;
}

export interface IngestOptions {
  settings: IngestSettings;
  /** Asked anew for each message, so that definitions may change while it runs; then call `refresh`. */
  directory: () => Directory;
  journal: Journal;
  clock: () => Micros;
  report: Report;
  /**
   * Blocks in the order of arrival, which is that of the journal. They come at once, before they are durable: a
   * message that could not be kept comes again, and its blocks then come twice. Take them in quickly; it is called
   * from the socket's side.
   */
  onMessage: (blocks: SampleBlock[], position: Position, receivedMicros: Micros) => void;
  onLoggerStatus: (status: LoggerStatus) => void;
}

export interface IngestStatus {
  broker: LinkStatus;
  /** Messages since the start: all, those without anything usable, those that could not be kept. */
  messages: number;
  refused: number;
  notKept: number;
  bytes: number;
}

export interface Ingest {
  publish(topic: string, payload: Uint8Array | string, options?: PublishOptions): Promise<void>;
  status(): IngestStatus;
  refresh(): void;
  stop(): Promise<void>;
}

type Counts = Omit<IngestStatus, 'broker'>;

const LIMIT_STATUS_BYTES = 1024;

/**
 * Takes messages from a broker, of our own or outside: decode, hand on, journal, and acknowledge when durable. A
 * message without anything usable is acknowledged and counted, but not kept: it would be refused again.
 */
export async function startIngest(options: IngestOptions): Promise<Ingest> {
  const { settings, directory, report } = options;
  const counts = { messages: 0, refused: 0, notKept: 0, bytes: 0 };
  const take = (message: Incoming): Promise<void> => takeMessage(options, counts, message);
  const link: Link =
    settings.kind === 'outside'
      ? startClient({ settings, filters: () => directory().filters(), take, report })
      : await startBroker({
          settings,
          take,
          report,
          isReserved: (topic) => isResult(directory(), topic),
          isRetained: (topic) => isStatusOfKnownLogger(directory(), topic),
        });
  return {
    publish: (topic, payload, publishing) => link.publish(topic, payload, publishing),
    status: () => ({ broker: link.status(), ...counts }),
    refresh: () => link.refresh(),
    stop: () => link.stop(),
  };
}

/** A throw of the takers is our own mistake and comes out at the socket; only the journal's failure is a rejection. */
function takeMessage(options: IngestOptions, counts: Counts, message: Incoming): Promise<void> {
  const { directory, journal, clock, report, onMessage } = options;
  const { topic, payload } = message;
  const receivedMicros = clock();
  counts.messages += 1;
  counts.bytes += payload.length;
  const known = directory();
  const address = addressOf(known, topic);
  if (address.ok && address.value.kind === 'status') {
    takeStatus(options, counts, message, address.value, receivedMicros);
    return Promise.resolve();
  }
  const { blocks, complaints } = decodeMessage(known, topic, payload, { nowMicros: receivedMicros });
  for (const complaint of complaints) report(complaint);
  if (blocks.length === 0) {
    if (complaints.length > 0) counts.refused += 1;
    return Promise.resolve();
  }
  const { position, durable } = journal.append({ receivedMicros, topic, payload });
  if (position !== null) onMessage(blocks, position, receivedMicros);
  return durable.catch((error: unknown) => {
    counts.notKept += 1;
    // The journal itself tells of a failed write, once; here only of what it had no room to take.
    if (position === null && error instanceof SpanbeatError) {
      report({ code: error.code, where: topic, detail: 'the message was not taken' });
    }
    throw error;
  });
}

function takeStatus(
  { directory, report, onLoggerStatus }: IngestOptions,
  counts: Counts,
  { topic, payload }: Incoming,
  { bridge, logger }: Address,
  receivedMicros: Micros,
): void {
  if (isStatusOfKnownLogger(directory(), topic)) {
    const text = Buffer.from(payload.subarray(0, LIMIT_STATUS_BYTES)).toString('utf8');
    onLoggerStatus({ bridge, logger, text, receivedMicros });
    return;
  }
  counts.refused += 1;
  const code = directory().bridge(bridge) === undefined ? 'BRIDGE_UNKNOWN' : 'LOGGER_UNKNOWN';
  report({ code, where: topic.slice(0, 200), detail: 'a status of a logger that is not defined' });
}

/** `<root>/<bridge>/passages` and `<root>/<bridge>/alarms`, on which only this server speaks. */
function isResult(directory: Directory, topic: string): boolean {
  const levels = topic.startsWith(`${directory.root}/`) ? topic.split('/') : [];
  return levels.length === 3 && (levels[2] === 'passages' || levels[2] === 'alarms');
}

function isStatusOfKnownLogger(directory: Directory, topic: string): boolean {
  const address = addressOf(directory, topic);
  if (!address.ok || address.value.kind !== 'status') return false;
  const { bridge, logger } = address.value;
  return directory.bridge(bridge)?.loggers.some(({ id }) => id === logger) === true;
}
