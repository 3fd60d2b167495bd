import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { accept, refuse, type Complaint, type Result } from '#core/contract/errors.ts';

export type PayloadKind = 'samples' | 'senml';

/** What a topic says about the message on it. */
export interface Address {
  bridge: string;
  logger: string;
  kind: PayloadKind | 'status';
}

/** The bridges that are defined, as the border asks for them. Cheap: it is asked for each message. */
export interface Directory {
  /** First level of the topics of loggers that keep to the contract. */
  readonly root: string;
  bridge(id: string): BridgeDefinition | undefined;
  /** The logger that publishes on a topic of its own, where one is mapped to it. */
  mapped(topic: string): { bridge: string; logger: string; kind: PayloadKind } | undefined;
  /** MQTT topic filters to subscribe to. */
  filters(): string[];
}

export const DEFAULT_ROOT = 'spanbeat';

/**
 * @param definitions checked definitions, each bridge once
 * @param root first topic level of loggers that keep to the contract
 * @returns the directory, and a complaint for each topic that is mapped twice (the first holds)
 */
export function buildDirectory(
  definitions: Iterable<BridgeDefinition>,
  root: string = DEFAULT_ROOT,
): { directory: Directory; complaints: Complaint[] } {
  const bridges = new Map<string, BridgeDefinition>();
  const plain = new Map<string, { bridge: string; logger: string; kind: PayloadKind }>();
  const wild: { filter: string; levels: string[]; target: { bridge: string; logger: string; kind: PayloadKind } }[] =
    [];
  const complaints: Complaint[] = [];
  for (const definition of definitions) {
    bridges.set(definition.id, definition);
    for (const logger of definition.loggers) {
      if (logger.topic === undefined) continue;
      const where = `${definition.id} loggers.${logger.id}.topic`;
      const target = { bridge: definition.id, logger: logger.id, kind: logger.payload ?? 'samples' };
      if (plain.has(logger.topic) || wild.some(({ filter }) => filter === logger.topic)) {
        complaints.push({ code: 'DEFINITION_DUPLICATE_ID', where, detail: `topic ${logger.topic} is mapped twice` });
      } else if (!isFilter(logger.topic)) {
        complaints.push({ code: 'DEFINITION_INVALID', where, detail: `${logger.topic} is no MQTT topic filter` });
      } else if (/[+#]/.test(logger.topic)) {
        wild.push({ filter: logger.topic, levels: logger.topic.split('/'), target });
      } else plain.set(logger.topic, target);
    }
  }
  const filters = ['samples', 'senml', 'status'].map((kind) => `${root}/+/+/${kind}`);
  const directory: Directory = {
    root,
    bridge: (id) => bridges.get(id),
    mapped(topic) {
      const exact = plain.get(topic);
      if (exact !== undefined || wild.length === 0) return exact;
      const levels = topic.split('/');
      return wild.find((entry) => matches(entry.levels, levels))?.target;
    },
    filters: () => [...filters, ...plain.keys(), ...wild.map(({ filter }) => filter)],
  };
  return { directory, complaints };
}

/**
 * Whose message a topic carries: that of a mapped logger, else `<root>/<bridge>/<logger>/{samples,senml,status}`.
 * Bridge and logger are not yet known to exist.
 *
 * @example addressOf(directory, 'spanbeat/ottermere/OT-1/samples') // bridge ottermere, logger OT-1, kind samples
 */
export function addressOf(directory: Directory, topic: string): Result<Address> {
  const mapped = directory.mapped(topic);
  if (mapped !== undefined) return accept(mapped);
  const prefix = `${directory.root}/`;
  const levels = topic.startsWith(prefix) ? topic.slice(prefix.length).split('/') : [];
  const [bridge, logger, kind] = levels;
  if (levels.length !== 3 || !bridge || !logger || (kind !== 'samples' && kind !== 'senml' && kind !== 'status')) {
    return refuse('MESSAGE_TOPIC', `expected ${prefix}<bridge>/<logger>/samples, senml or status`, topic.slice(0, 200));
  }
  return accept({ bridge, logger, kind });
}

/** MQTT 5 section 4.7.1: `#` only alone and last, `+` only alone in its level; no null character, not empty. */
function isFilter(topic: string): boolean {
  const levels = topic.split('/');
  return (
    topic !== '' &&
    !topic.includes('\0') &&
    levels.every((level, i) => !/[+#]/.test(level) || level === '+' || (level === '#' && i === levels.length - 1))
  );
}

function matches(filter: readonly string[], topic: readonly string[]): boolean {
  // Section 4.7.2: a wildcard in the first level does not match topics of the server's own, which begin with $.
  if (topic[0]?.startsWith('$') && /^[+#]$/.test(filter[0]!)) return false;
  for (let i = 0; i < filter.length; i += 1) {
    if (filter[i] === '#') return true;
    if (i >= topic.length || (filter[i] !== '+' && filter[i] !== topic[i])) return false;
  }
  return filter.length === topic.length;
}
