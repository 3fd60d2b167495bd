import type {
  AlarmQuery,
  Day,
  DayQuery,
  PassagePage,
  PassageQuery,
  PassageRow,
  SpectraView,
} from '#core/contract/api.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { SpectrumLine, WindowChannel } from '#core/contract/pipeline.ts';
import type { Report } from '../report.ts';
import type { Micros } from '#core/contract/time.ts';
import { REMEMBERED_CLOSED, type NoData, type PassageAbove } from '#core/alarm/state.ts';
import {
  alarmOf,
  alarmsOf,
  alarmsOfPassage,
  deskAlarmsOf,
  noDataOf,
  openAlarmsOf,
  passagesAboveOf,
  saveNoDataOf,
  upsertAlarms,
} from './alarms.ts';
import { openArchive, placeOf, type Archive, type StoredDefinition } from './archive.ts';
import { createCommits } from './commits.ts';
import { openDuckDb, type Ask, type Database } from './database.ts';
import { daysOf } from './days.ts';
import { loadDefinitions, type Definitions } from './definitions.ts';
import { createLedger, type Entry, type Ledger } from './ledger.ts';
import { openSound } from './opening.ts';
import { alikeOf, hasPassage, insertPassage, lastOf, neighboursOf, pageOf, passageOf } from './passages.ts';
import { dueWaveforms, thin, type RetentionRules, type Thinned } from './retention.ts';
import { createRoom } from './room.ts';
import { markFilled } from './schema.ts';
import { createSpectra } from './spectra.ts';
import { createWrites } from './writes.ts';

export interface HistoryOptions {
  /** The database file; its folder is made where it is missing. */
  file: string;
  archiveFolder: string;
  /** Wall clock. */
  clock: () => Micros;
  report: Report;
  /** Writes held at most; beyond, the caller waits. */
  maxPending?: number;
  /** How the file is opened: DuckDB where absent. */
  openDatabase?: (file: string) => Promise<Database>;
  /** Pause between tries of a failed write, for tests. */
  pause?: (ms: number, signal: AbortSignal) => Promise<void>;
}

interface Commit {
  passage: Passage;
  channels: readonly WindowChannel[];
  /** Alarms that the passage's record changed or raised. */
  alarms: readonly Alarm[];
}

/** All that is remembered: definitions, passages with their wave forms, alarms, and when nobody was looking. */
export interface History {
  /** Stores a definition unless its text is that of the newest version. @returns its version, from 1 */
  saveDefinition(definition: BridgeDefinition, text: string, micros: Micros): Promise<number>;
  /** The newest of each bridge. */
  definitions(): StoredDefinition[];
  definitionAt(bridge: string, version: number): StoredDefinition | null;
  versions(bridge: string): { version: number; sinceMicros: Micros }[];

  /**
   * Stores a passage with its wave form and alarms. When it resolves, all of it is durable: first the archive file, then
   * passage and alarms in one transaction. A passage that is there already stays as it is (`already`); its alarms are
   * stored all the same. A disk that refuses is tried again until it takes it.
   *
   * @throws Error where the definition version was never saved: a mistake of the caller
   */
  commitPassage(commit: Commit): Promise<{ already: boolean }>;
  saveAlarms(alarms: readonly Alarm[]): Promise<void>;
  saveNoData(noData: NoData): Promise<void>;
  /** Writes handed in and not yet done. */
  pendingWrites(): number;
  /**
   * Null where there is room, else resolves when there is: whoever brings data waits for it before acknowledging more, so
   * that a disk that is slow slows the loggers and does not fill the memory. Where it refuses for long, the loggers' blocks
   * stay with them or their broker, and no new alarm is raised until it writes again; the page says so (STORE_WRITE).
   */
  room(): Promise<void> | null;

  passage(id: string): Promise<{ passage: Passage; hasWaveform: boolean } | null>;
  passages(query: PassageQuery): Promise<PassagePage>;
  neighbours(id: string): Promise<{ earlier: string | null; later: string | null }>;
  alike(passage: Passage, limit?: number): Promise<PassageRow[]>;
  lastPassages(): Promise<PassageRow[]>;
  /** @param timeZone IANA name; that of the bridge's newest definition where absent, else UTC */
  days(query: DayQuery, timeZone?: string): Promise<Day[]>;
  passagesAbove(bridge: string, sinceMicros: Micros): Promise<PassageAbove[]>;

  openAlarms(): Promise<Alarm[]>;
  /** What the desk of a bridge starts with: open alarms and the newest closed ones. */
  deskAlarms(bridge: string): Promise<Alarm[]>;
  alarms(query: AlarmQuery): Promise<Alarm[]>;
  alarm(id: string): Promise<Alarm | null>;
  alarmsOfPassage(passage: string): Promise<Alarm[]>;
  noData(bridge: string, fromMicros: Micros, toMicros: Micros): Promise<NoData[]>;

  /** Null where there is no such passage, retention has thinned its wave form, or its file is gone. */
  waveform(id: string): Promise<WindowChannel[] | null>;
  /** Path of the Parquet file, on the same condition. */
  waveformFile(id: string): Promise<string | null>;
  applyRetention(rules: RetentionRules, nowMicros: Micros): Promise<Thinned>;

  addSpectrum(line: SpectrumLine): void;
  spectra(bridge: string, sensor: string): SpectraView | null;

  /** Waits for the writes that are held and lets go of the files. Idempotent. */
  close(): Promise<void>;
}

const MAX_PENDING = 64;
/** Writes that may wait before whoever brings data waits too; each passage among them holds its wave form, about 1 MB. */
const ROOM = 256;
const ALIKE = 12;

/** @throws SpanbeatError STORE_LOCKED, STORE_NEWER, STORE_WRITE or DISK_FULL, see `openSound` */
export async function openHistory(options: HistoryOptions): Promise<History> {
  const { file, archiveFolder, clock, report, maxPending = MAX_PENDING, openDatabase = openDuckDb, pause } = options;
  const { database, toFill } = await openSound(file, openDatabase, clock(), report);
  const archive = await openArchive(archiveFolder);
  const writes = createWrites({
    limit: maxPending,
    report,
    recover: () => database.revive(),
    ...(pause === undefined ? {} : { pause }),
  });
  // Files are written in a line of their own, so that an alarm never waits for a wave form.
  const files = createWrites({ limit: maxPending, report, ...(pause === undefined ? {} : { pause }) });
  const write = <T>(work: (ask: Ask) => Promise<T>): Promise<T> => writes.run(() => database.transaction(work));
  const definitions = await loadDefinitions(database.ask, write);
  const ledger = createLedger(archiveFolder);
  if (toFill) await fillFromArchive({ archive, ledger, definitions, write }, report);
  return assemble({ clock, database, archive, ledger, definitions, write, writes, files });
}

interface Parts {
  clock: () => Micros;
  database: Database;
  archive: Archive;
  ledger: Ledger;
  definitions: Definitions;
  write: <T>(work: (ask: Ask) => Promise<T>) => Promise<T>;
  writes: ReturnType<typeof createWrites>;
  files: ReturnType<typeof createWrites>;
}

function assemble({ clock, database, archive, ledger, definitions, write, writes, files }: Parts): History {
  const { ask } = database;
  const commits = createCommits(writes, ledger, database);
  const room = createRoom(ROOM);
  const noted = <T>(entries: Entry[], work: (ask: Ask) => Promise<T>): Promise<T> =>
    room.hold(commits.commit(entries, work));
  const spectra = createSpectra();
  let closing: Promise<void> | null = null;

  const withWaveform = async (id: string): Promise<Passage | null> => {
    const stored = await passageOf(ask, id);
    return stored?.hasWaveform === true ? stored.passage : null;
  };

  const keepWaveform = async (passage: Passage, channels: readonly WindowChannel[]): Promise<void> => {
    const version = passage.provenance.definitionVersion;
    const definition = definitions.at(passage.bridge, version);
    if (definition === null) throw new Error(`definition ${version} of ${passage.bridge} was never saved`);
    if (!(await hasPassage(ask, passage.id))) {
      await files.run(() => archive.write({ passage, definition }, channels));
    }
  };
  const commitPassage = async ({ passage, channels, alarms }: Commit): Promise<{ already: boolean }> => {
    await keepWaveform(passage, channels);
    const hasWaveform = channels.some(({ runs }) => runs.length > 0);
    return commits.commit(entriesOf(alarms), async (ask) => {
      const inserted = await insertPassage(ask, passage, hasWaveform);
      await upsertAlarms(ask, alarms);
      return { already: !inserted };
    });
  };

  return {
    saveDefinition: (definition, text, micros) => definitions.save(definition, text, micros),
    definitions: () => definitions.all(),
    definitionAt: (bridge, version) => definitions.at(bridge, version),
    versions: (bridge) => definitions.versions(bridge),

    commitPassage: (passage) => room.hold(commitPassage(passage)),
    saveAlarms: (alarms) => noted(entriesOf(alarms), (ask) => upsertAlarms(ask, alarms)),
    saveNoData: (noData) => noted([{ noData }], (ask) => saveNoDataOf(ask, noData)),
    pendingWrites: () => room.held(),
    room: () => room.free(),

    passage: (id) => passageOf(ask, id),
    passages: (query) => pageOf(ask, query),
    neighbours: (id) => neighboursOf(ask, id),
    alike: (passage, limit = ALIKE) => alikeOf(ask, passage, limit),
    lastPassages: () => lastOf(ask),
    days: (query, timeZone = definitions.newest(query.bridge)?.definition.timeZone ?? 'UTC') =>
      daysOf(ask, query, timeZone, clock(), definitions.versions(query.bridge)[0]?.sinceMicros ?? null),
    passagesAbove: (bridge, sinceMicros) => passagesAboveOf(ask, bridge, sinceMicros),

    openAlarms: () => openAlarmsOf(ask),
    deskAlarms: (bridge) => deskAlarmsOf(ask, bridge, REMEMBERED_CLOSED),
    alarms: (query) => alarmsOf(ask, query),
    alarm: (id) => alarmOf(ask, id),
    alarmsOfPassage: (passage) => alarmsOfPassage(ask, passage),
    noData: (bridge, fromMicros, toMicros) => noDataOf(ask, bridge, fromMicros, toMicros),

    async waveform(id) {
      const passage = await withWaveform(id);
      return passage === null ? null : archive.read(placeOf(passage));
    },
    async waveformFile(id) {
      const passage = await withWaveform(id);
      if (passage === null || !(await archive.has(placeOf(passage)))) return null;
      return archive.path(placeOf(passage));
    },
    async applyRetention(rules, nowMicros) {
      const timeZoneOf = (bridge: string): string => definitions.newest(bridge)?.definition.timeZone ?? 'UTC';
      const due = await dueWaveforms(ask, rules, nowMicros, timeZoneOf);
      return thin(due, {
        archive,
        passage: async (id) => (await passageOf(ask, id))?.passage ?? null,
        definitionAt: (bridge, version) => definitions.at(bridge, version),
        mark: async (id) => {
          await write((ask) => ask('UPDATE passages SET has_waveform = false WHERE id = $1', [id]));
        },
      });
    },

    addSpectrum: (line) => spectra.add(line),
    spectra: (bridge, sensor) => spectra.view(bridge, sensor),

    close() {
      closing ??= (async () => {
        await files.close();
        await writes.close();
        archive.close();
        database.close();
      })();
      return closing;
    },
  };
}

const entriesOf = (alarms: readonly Alarm[]): Entry[] => alarms.map((alarm) => ({ alarm }));

/** Sheets or entries a transaction when a database is filled. */
const FILL_AT_ONCE = 200;

/** Definitions and passages as the archive's files tell them, alarms and times without data as the ledger does. */
async function fillFromArchive(
  { archive, ledger, definitions, write }: Pick<Parts, 'archive' | 'ledger' | 'definitions' | 'write'>,
  report: Report,
): Promise<void> {
  const damaged = (path: string, reason: string): void =>
    report({ code: 'STORE_CORRUPT', where: path, detail: reason });
  for await (const sheets of batches(archive.sheets(damaged))) {
    for (const { definition } of sheets) await definitions.restore(definition);
    await write(async (ask) => {
      for (const { passage, hasWaveform } of sheets) await insertPassage(ask, passage, hasWaveform);
    });
  }
  for await (const entries of batches(ledger.entries(damaged))) {
    await write(async (ask) => {
      for (const entry of entries) {
        if ('alarm' in entry) await upsertAlarms(ask, [entry.alarm]);
        else await saveNoDataOf(ask, entry.noData);
      }
    });
  }
  await write(markFilled);
}

async function* batches<T>(items: AsyncIterable<T>): AsyncGenerator<T[]> {
  let batch: T[] = [];
  for await (const item of items) {
    if (batch.push(item) < FILL_AT_ONCE) continue;
    yield batch;
    batch = [];
  }
  if (batch.length > 0) yield batch;
}
