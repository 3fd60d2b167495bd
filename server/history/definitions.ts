import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Micros } from '#core/contract/time.ts';
import type { StoredDefinition } from './archive.ts';
import type { Ask, Database, Row } from './database.ts';

/** Definitions of bridges by version; few and small, so all are held in memory and the database is the copy that lasts. */
export interface Definitions {
  /** Stores a definition unless its text is that of the newest version. @returns its version, from 1 */
  save(definition: BridgeDefinition, text: string, micros: Micros): Promise<number>;
  /** Puts one in under its own version, from the archive. */
  restore(stored: StoredDefinition): Promise<void>;
  at(bridge: string, version: number): StoredDefinition | null;
  newest(bridge: string): StoredDefinition | null;
  /** The newest of each bridge, by id. */
  all(): StoredDefinition[];
  versions(bridge: string): { version: number; sinceMicros: Micros }[];
}

/** @param write runs a transaction in its turn */
export async function loadDefinitions(
  ask: Ask,
  write: <T>(work: Parameters<Database['transaction']>[0] & ((ask: Ask) => Promise<T>)) => Promise<T>,
): Promise<Definitions> {
  const byBridge = new Map<string, StoredDefinition[]>();
  const keep = (stored: StoredDefinition): void => {
    const others = (byBridge.get(stored.bridge) ?? []).filter(({ version }) => version !== stored.version);
    byBridge.set(
      stored.bridge,
      [...others, stored].toSorted((a, b) => a.version - b.version),
    );
  };
  for (const row of await ask('SELECT * FROM definitions ORDER BY bridge, version')) keep(storedOf(row));
  const newest = (bridge: string): StoredDefinition | null => byBridge.get(bridge)?.at(-1) ?? null;

  return {
    newest,
    async save(definition, text, micros) {
      const before = newest(definition.id);
      if (before?.text === text) return before.version;
      const stored = {
        bridge: definition.id,
        version: (before?.version ?? 0) + 1,
        sinceMicros: micros,
        text,
        definition,
      };
      await write((ask) => insert(ask, stored));
      keep(stored);
      return stored.version;
    },
    async restore(stored) {
      if (byBridge.get(stored.bridge)?.some(({ version }) => version === stored.version)) return;
      await write((ask) => insert(ask, stored));
      keep(stored);
    },
    at: (bridge, version) => byBridge.get(bridge)?.find((stored) => stored.version === version) ?? null,
    all: () => [...byBridge.keys()].toSorted().flatMap((bridge) => newest(bridge) ?? []),
    versions: (bridge) => (byBridge.get(bridge) ?? []).map(({ version, sinceMicros }) => ({ version, sinceMicros })),
  };
}

async function insert(ask: Ask, { bridge, version, sinceMicros, text, definition }: StoredDefinition): Promise<void> {
  await ask(
    `INSERT INTO definitions (bridge, version, since_micros, text, json) VALUES ($1, $2, $3, $4, $5)
     ON CONFLICT (bridge, version) DO NOTHING`,
    [bridge, version, sinceMicros, text, JSON.stringify(definition)],
  );
}

function storedOf(row: Row): StoredDefinition {
  return {
    bridge: String(row['bridge']),
    version: Number(row['version']),
    sinceMicros: Number(row['since_micros']),
    text: String(row['text']),
    definition: JSON.parse(String(row['json'])) as BridgeDefinition,
  };
}
