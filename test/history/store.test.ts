import { existsSync } from 'node:fs';
import { appendFile, mkdir, mkdtemp, readdir, readFile, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { measured } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { openDuckDb } from '../../server/history/database.ts';
import { openHistory, type History, type HistoryOptions } from '../../server/history/store.ts';
import { aDefinition, aPassage, aWindow, anAlarm, DAWN, type PassageWish } from '../support/specimen.ts';

const S = MICROS_PER_SECOND;
const HOUR = 3600 * S;
const DAY = 24 * HOUR;
const YAML = 'spanbeat: 1\nid: ottermere\nname: "It\'s a trough"\n';

let folder: string;
let complaints: Complaint[];
let open: History[];

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-history-'));
  complaints = [];
  open = [];
});
afterEach(async () => {
  for (const history of open) await history.close();
  await rm(folder, { recursive: true, force: true });
});

async function history(over: Partial<HistoryOptions> = {}): Promise<History> {
  const opened = await openHistory({
    file: join(folder, 'history.duckdb'),
    archiveFolder: join(folder, 'archive'),
    clock: () => DAWN + DAY,
    report: (complaint) => void complaints.push(complaint),
    ...over,
  });
  open.push(opened);
  return opened;
}

async function begun(over: Partial<HistoryOptions> = {}): Promise<History> {
  const opened = await history(over);
  await opened.saveDefinition(aDefinition(), YAML, DAWN - DAY);
  return opened;
}

async function commit(
  store: History,
  wish: PassageWish = {},
  alarms = [] as ReturnType<typeof anAlarm>[],
): Promise<Passage> {
  const passage = aPassage(wish);
  await store.commitPassage({ passage, channels: aWindow(passage, { seconds: 0.1 }), alarms });
  return passage;
}

describe('definitions', () => {
  test('get a new version when their text changes, and only then', async () => {
    const store = await history();
    expect(await store.saveDefinition(aDefinition(), YAML, DAWN)).toBe(1);
    expect(await store.saveDefinition(aDefinition(), YAML, DAWN + 1)).toBe(1);
    expect(await store.saveDefinition(aDefinition({ name: 'Renamed' }), `${YAML}#`, DAWN + 2)).toBe(2);
    await store.close();
    const again = await history();
    expect(again.versions('ottermere')).toEqual([
      { version: 1, sinceMicros: DAWN },
      { version: 2, sinceMicros: DAWN + 2 },
    ]);
    expect(again.definitionAt('ottermere', 1)).toEqual({
      bridge: 'ottermere',
      version: 1,
      sinceMicros: DAWN,
      text: YAML,
      definition: aDefinition(),
    });
    expect(again.definitions().map(({ version }) => version)).toEqual([2]);
    expect(again.definitionAt('ottermere', 3)).toBeNull();
  });
});

describe('a passage', () => {
  test('comes back whole, with its alarm and its wave form bit for bit, over a restart', async () => {
    const store = await begun();
    const passage = aPassage({ peaks: { A1: 2.5, A2: 2.4 } });
    const channels = aWindow(passage);
    const alarm = anAlarm(DAWN, 'AL', { passage: passage.id });
    expect(await store.commitPassage({ passage, channels, alarms: [alarm] })).toEqual({ already: false });
    await store.close();
    const again = await history();
    expect(await again.passage(passage.id)).toEqual({ passage, hasWaveform: true });
    expect(await again.alarmsOfPassage(passage.id)).toEqual([alarm]);
    expect(await again.waveform(passage.id)).toEqual(channels);
    expect(await again.waveformFile(passage.id)).toBe(
      join(folder, 'archive/ottermere/2026/12', `${passage.id}.parquet`),
    );
    expect((await again.passages({})).rows[0]).toEqual({
      id: passage.id,
      bridge: 'ottermere',
      onMicros: DAWN,
      peak: 2.5,
      sensor: 'A1',
      severity: 'AL',
      ofGravest: 2.5 / 3.5,
      speedMs: 44.4,
      direction: 'rising',
      axles: 32,
      f1Hz: 5.2,
      zeta1: 0.013,
      temperatureC: null,
      quality: 'good',
      alarm: alarm.id,
    });
  });

  test('committed twice is there once, as it was first', async () => {
    const store = await begun();
    await commit(store, { peaks: { A1: 1 } });
    const passage = aPassage({ peaks: { A1: 2 } });
    expect(await store.commitPassage({ passage, channels: [], alarms: [] })).toEqual({ already: true });
    expect((await store.passages({})).rows.map(({ peak }) => peak)).toEqual([1]);
    expect(await store.waveform(passage.id)).not.toBeNull();
  });

  test('whose file somebody has removed has no wave form, and is still there', async () => {
    const store = await begun();
    const passage = await commit(store);
    await rm((await store.waveformFile(passage.id)) ?? '');
    expect(await store.waveform(passage.id)).toBeNull();
    expect(await store.waveformFile(passage.id)).toBeNull();
    expect((await store.passage(passage.id))?.passage).toEqual(passage);
  });

  test('without its definition is refused as a mistake of the caller', async () => {
    const store = await begun();
    await expect(commit(store, { version: 7 })).rejects.toThrow(/never saved/);
  });

  test('that is unknown is null everywhere', async () => {
    const store = await begun();
    expect(await store.passage('none')).toBeNull();
    expect(await store.waveform('../../etc/passwd')).toBeNull();
    expect(await store.waveformFile('none')).toBeNull();
    expect(await store.alarm('none')).toBeNull();
    expect(await store.neighbours('none')).toEqual({ earlier: null, later: null });
  });

  test('knows its neighbours in time and those alike, nearest in speed first', async () => {
    const store = await begun();
    await store.saveDefinition(aDefinition({ id: 'fennick' }), YAML, DAWN);
    const [a, b, c] = [
      await commit(store, { onMicros: DAWN, speedMs: 30 }),
      await commit(store, { onMicros: DAWN + HOUR, speedMs: 41 }),
      await commit(store, { onMicros: DAWN + 2 * HOUR, speedMs: null }),
    ];
    await commit(store, { onMicros: DAWN + 3 * HOUR, direction: 'falling' });
    await commit(store, { bridge: 'fennick', onMicros: DAWN + 3.5 * HOUR });
    const last = await commit(store, { onMicros: DAWN + 4 * HOUR, speedMs: 40 });
    expect(await store.neighbours(b.id)).toEqual({ earlier: a.id, later: c.id });
    expect((await store.neighbours(a.id)).earlier).toBeNull();
    expect((await store.alike(last)).map(({ id }) => id)).toEqual([b.id, a.id, c.id]);
    expect((await store.lastPassages()).map(({ id }) => id)).toEqual(['fennick-20261201-084233-2', last.id]);
  });
});

describe('the list of passages', () => {
  test('turns pages without missing or repeating one, also under equal keys and while new ones come in', async () => {
    const store = await begun();
    const peaks = [1, 2, 2, 2, 2, 3, null, 0, null, 2];
    for (const [i, peak] of peaks.entries()) {
      await commit(store, { onMicros: DAWN + i * HOUR, peaks: peak === null ? {} : { A1: peak } });
    }
    for (const order of ['time', 'peak'] as const) {
      const whole = (await store.passages({ order, limit: 1000 })).rows.map(({ id }) => id);
      expect(whole).toHaveLength(order === 'time' ? 10 : 12);
      const turned: string[] = [];
      let cursor: string | undefined;
      do {
        const page = await store.passages({ order, limit: 3, ...(cursor === undefined ? {} : { cursor }) });
        turned.push(...page.rows.map(({ id }) => id));
        cursor = page.next ?? undefined;
        expect(cursor?.length ?? 0).toBeLessThanOrEqual(200);
        if (turned.length === 3)
          await commit(store, { onMicros: DAWN + (order === 'time' ? 20 : 21) * HOUR, peaks: { A1: 9 } });
      } while (cursor !== undefined);
      expect(turned).toEqual(whole);
      if (order === 'time') await commit(store, { onMicros: DAWN + 30 * HOUR, peaks: { A1: 2 } });
    }
  });

  test('is highest first by peak, those without a peak last, and tells how many there are in all', async () => {
    const store = await begun();
    for (const [i, peak] of [1, null, 3, 2].entries()) {
      await commit(store, { onMicros: DAWN + i * HOUR, peaks: peak === null ? {} : { A1: peak } });
    }
    const page = await store.passages({ order: 'peak', limit: 2 });
    expect(page.rows.map(({ peak }) => peak)).toEqual([3, 2]);
    expect(page.total).toBe(4);
    const rest = await store.passages({ order: 'peak', limit: 2, cursor: page.next ?? '' });
    expect(rest.rows.map(({ peak }) => peak)).toEqual([1, null]);
    expect(rest).toMatchObject({ next: null, total: 4 });
  });

  test('marks a peak that is but a lower bound, and no other poor one', async () => {
    const store = await begun();
    const bound = measured(1.2, null, 'poor', 'lower bound: the recording stops before the train has left');
    const plain = aPassage({ onMicros: DAWN, quality: 'poor' });
    const cut = aPassage({ onMicros: DAWN + HOUR, quality: 'poor' });
    for (const passage of [plain, { ...cut, peak: { ...cut.peak, measured: bound } }])
      await store.commitPassage({ passage, channels: [], alarms: [] });
    const { rows } = await store.passages({ bridge: 'ottermere' });
    expect(rows.map(({ id, peakAtLeast }) => [id, peakAtLeast])).toEqual([
      [cut.id, true],
      [plain.id, undefined],
    ]);
  });

  test('is narrowed by every filter of the query', async () => {
    const store = await begun();
    await commit(store, { onMicros: DAWN, peaks: { A1: 1 }, speedMs: 20 });
    await commit(store, {
      onMicros: DAWN + HOUR,
      peaks: { A1: 2 },
      speedMs: 30,
      direction: 'falling',
      quality: 'poor',
    });
    const peaksOf = async (query: Parameters<History['passages']>[0]): Promise<(number | null)[]> =>
      (await store.passages(query)).rows.map(({ peak }) => peak);
    expect(await peaksOf({ bridge: 'fennick' })).toEqual([]);
    expect(await peaksOf({ fromMicros: DAWN + 1 })).toEqual([2]);
    expect(await peaksOf({ toMicros: DAWN + HOUR })).toEqual([1]);
    expect(await peaksOf({ minPeak: 1.5 })).toEqual([2]);
    expect(await peaksOf({ maxPeak: 1 })).toEqual([1]);
    expect(await peaksOf({ minSpeed: 25 })).toEqual([2]);
    expect(await peaksOf({ maxSpeed: 25 })).toEqual([1]);
    expect(await peaksOf({ direction: 'falling' })).toEqual([2]);
    expect(await peaksOf({ quality: 'good', bridge: 'ottermere' })).toEqual([1]);
  });

  test('refuses a cursor that is none, or of another order', async () => {
    const store = await begun();
    await commit(store);
    await commit(store, { onMicros: DAWN + HOUR });
    const { next } = await store.passages({ limit: 1 });
    for (const cursor of ['x', '', next ?? '', Buffer.from('[null,1,"a"]').toString('base64url')]) {
      await expect(store.passages({ order: 'peak', cursor })).rejects.toMatchObject({ code: 'REQUEST_INVALID' });
    }
  });
});

describe('alarms', () => {
  test('are stored as they now are, and an echo of the past takes no answer away', async () => {
    const store = await begun();
    const raised = anAlarm();
    const step = { ...raised.steps[0]!, what: 'acknowledged' as const };
    const answered = {
      ...raised,
      state: 'acknowledged' as const,
      acknowledged: { micros: DAWN, by: 'R. Fenn', note: 'it\'s "seen" 🚆' },
      steps: [...raised.steps, step],
    };
    await store.saveAlarms([raised]);
    await store.saveAlarms([answered]);
    await store.saveAlarms([raised]);
    expect(await store.alarm(raised.id)).toEqual(answered);
  });

  test('are found by bridge, time and openness, newest first', async () => {
    const store = await begun();
    await store.saveAlarms([
      anAlarm(DAWN),
      anAlarm(DAWN + HOUR, 'IL', { state: 'normal' }),
      anAlarm(DAWN + 2 * HOUR, 'AL', { state: 'returned to normal, unacknowledged' }),
      anAlarm(DAWN + 3 * HOUR, 'AL', { bridge: 'fennick' }),
    ]);
    const times = (alarms: { raisedMicros: Micros }[]): number[] => alarms.map((a) => (a.raisedMicros - DAWN) / HOUR);
    expect(times(await store.alarms({}))).toEqual([3, 2, 1, 0]);
    expect(times(await store.alarms({ which: 'open', bridge: 'ottermere' }))).toEqual([2, 0]);
    expect(times(await store.alarms({ fromMicros: DAWN + HOUR, toMicros: DAWN + 3 * HOUR }))).toEqual([2, 1]);
    expect(times(await store.alarms({ limit: 1 }))).toEqual([3]);
    expect(times(await store.openAlarms())).toEqual([3, 2, 0]);
    expect(times(await store.deskAlarms('ottermere')).toSorted()).toEqual([0, 1, 2]);
  });

  test('count the passages above since a time by their records, and none without a train', async () => {
    const store = await begun();
    await commit(store, { onMicros: DAWN, peaks: { A1: 2.5 } });
    await commit(store, { onMicros: DAWN + HOUR, peaks: { A1: 1 } });
    const late = await commit(store, { onMicros: DAWN + 2 * HOUR, peaks: { A1: 3 } });
    const blow = aPassage({ onMicros: DAWN + HOUR + 5, peaks: { A1: 3 } });
    const noTrain = { ...blow, phases: { ...blow.phases, foundBy: 'live level' as const } };
    await store.commitPassage({ passage: noTrain, channels: aWindow(blow, { seconds: 0.1 }), alarms: [] });
    expect(await store.passagesAbove('ottermere', DAWN + 1)).toEqual([
      { limit: 'ballast', passage: late.id, micros: DAWN + 2 * HOUR },
    ]);
  });
});

describe('times without data', () => {
  test('begin once, end once, and a replay changes nothing', async () => {
    const store = await begun();
    const hole = { bridge: 'ottermere', logger: 'north', fromMicros: DAWN, toMicros: null };
    await store.saveNoData(hole);
    await store.saveNoData({ ...hole, fromMicros: DAWN + 5 });
    expect(await store.noData('ottermere', 0, DAWN + DAY)).toEqual([hole]);
    const ended = { ...hole, toMicros: DAWN + HOUR };
    await store.saveNoData(ended);
    await store.saveNoData(hole);
    await store.saveNoData(ended);
    expect(await store.noData('ottermere', DAWN + 1, DAWN + DAY)).toEqual([ended]);
    expect(await store.noData('ottermere', DAWN + HOUR, DAWN + DAY)).toEqual([]);
  });

  test('stand in the days they touch, those of several loggers as one', async () => {
    const store = await begun();
    const at = (logger: string, fromMicros: Micros, toMicros: Micros | null): Promise<void> =>
      store.saveNoData({ bridge: 'ottermere', logger, fromMicros, toMicros });
    const midnight = Date.UTC(2026, 11, 1) * 1000;
    await at('north', midnight - HOUR, midnight + HOUR);
    await at('south', midnight + HOUR / 2, midnight + 2 * HOUR);
    await at('north', midnight + 20 * HOUR, null);
    const days = await store.days({ bridge: 'ottermere', from: '2026-11-30', to: '2026-12-02' });
    expect(days.map(({ noData }) => noData)).toEqual([
      [{ fromMicros: midnight - HOUR, toMicros: midnight }],
      [
        { fromMicros: midnight, toMicros: midnight + 2 * HOUR },
        { fromMicros: midnight + 20 * HOUR, toMicros: midnight + DAY },
      ],
      // The clock stands at DAWN + 1 day: the interval that lasts ends there for now.
      [{ fromMicros: midnight + DAY, toMicros: DAWN + DAY }],
    ]);
  });
});

describe('days', () => {
  test('hold their passages by the clock of the bridge, with highest and exceedances', async () => {
    const store = await begun();
    const summer = Date.UTC(2026, 6, 1, 22, 30) * 1000; // 23:30 in London, 00:30 in Warsaw
    await commit(store, { onMicros: summer, peaks: { A1: 2.5 } });
    await commit(store, { onMicros: summer + HOUR, peaks: { A1: 3.6 } });
    await commit(store, { onMicros: summer + 2 * HOUR, peaks: {} });
    const counts = async (timeZone?: string): Promise<[string, number, number | null][]> =>
      (await store.days({ bridge: 'ottermere', from: '2026-07-01', to: '2026-07-02' }, timeZone)).map((day) => [
        day.day,
        day.passages,
        day.highest,
      ]);
    expect(await counts()).toEqual([
      ['2026-07-01', 1, 2.5],
      ['2026-07-02', 2, 3.6],
    ]);
    expect(await counts('Europe/Warsaw')).toEqual([
      ['2026-07-01', 0, null],
      ['2026-07-02', 3, 3.6],
    ]);
    const [, second] = await store.days({ bridge: 'ottermere', from: '2026-07-01', to: '2026-07-02' });
    expect(second?.above).toEqual({ AL: 0, IL: 0, IAL: 1 });
    expect(second?.marks.map(({ peak, severity }) => [peak, severity])).toEqual([
      [3.6, 'IAL'],
      [null, null],
    ]);
  });

  test('say when monitoring began, with the definition or with an older passage, and later days say nothing of it', async () => {
    const store = await begun();
    const began = async (): Promise<unknown[]> =>
      (await store.days({ bridge: 'ottermere', from: '2026-11-29', to: '2026-12-01' })).map(
        ({ beganMicros }) => beganMicros,
      );
    expect(await began()).toEqual([DAWN - DAY, DAWN - DAY, undefined]);
    await commit(store, { onMicros: DAWN - 2 * DAY });
    expect(await began()).toEqual([DAWN - 2 * DAY, undefined, undefined]);
  });
});

describe('retention', () => {
  test('keeps new, highest and exceeding wave forms, thins the others, and keeps every passage', async () => {
    const store = await begun();
    const old = DAWN - 40 * DAY;
    const low = await commit(store, { onMicros: old, peaks: { A1: 1 } });
    const high = await commit(store, { onMicros: old + HOUR, peaks: { A1: 1.5 } });
    const other = await commit(store, { onMicros: old + 2 * HOUR, peaks: { A1: 0.5 }, direction: 'falling' });
    const above = await commit(store, { onMicros: old + 3 * HOUR, peaks: { A1: 2.3 } });
    const alarmed = await commit(store, { onMicros: old + 4 * HOUR, peaks: { A1: 0.4 } });
    await store.saveAlarms([anAlarm(old, 'AL', { passage: alarmed.id })]);
    const fresh = await commit(store, { onMicros: DAWN - DAY, peaks: { A1: 0.1 } });
    const rules = { keepAllDays: 30, keepHighestPerDay: 1 };
    const first = await store.applyRetention(rules, DAWN);
    expect(first).toMatchObject({ dropped: 1, more: false });
    expect(first.bytes).toBeGreaterThan(0);
    expect(await store.applyRetention(rules, DAWN)).toEqual({ dropped: 0, bytes: 0, more: false });
    expect(await store.passage(low.id)).toEqual({ passage: low, hasWaveform: false });
    expect(await store.waveform(low.id)).toBeNull();
    expect(await store.waveformFile(low.id)).toBeNull();
    for (const { id } of [high, other, above, alarmed, fresh]) expect(await store.waveform(id)).not.toBeNull();
    expect((await store.passages({})).total).toBe(6);
    expect(await store.applyRetention({ keepAllDays: 30, keepHighestPerDay: 0 }, DAWN)).toMatchObject({ dropped: 2 });
  });
});

describe('a database that cannot be used', () => {
  test('when damaged is set aside unchanged, and a new one is filled from the archive', async () => {
    const store = await begun();
    const whole = await commit(store, { peaks: { A1: 1 } });
    const thinned = await commit(store, { onMicros: DAWN - 90 * DAY, peaks: { A1: 1 } });
    await store.saveDefinition(aDefinition({ name: 'Renamed' }), `${YAML}#`, DAWN);
    const second = await commit(store, { onMicros: DAWN + HOUR, version: 2 });
    await store.applyRetention({ keepAllDays: 30, keepHighestPerDay: 0 }, DAWN);
    const alarm = anAlarm(DAWN, 'AL', { passage: whole.id });
    const answered = { ...alarm, state: 'acknowledged' as const, steps: [...alarm.steps, ...alarm.steps] };
    await store.saveAlarms([alarm]);
    await store.saveAlarms([answered]);
    const hole = { bridge: 'ottermere', logger: 'north', fromMicros: DAWN, toMicros: DAWN + HOUR };
    await store.saveNoData({ ...hole, toMicros: null });
    await store.saveNoData(hole);
    await store.close();
    await appendFile(join(folder, 'archive/ottermere/ledger.jsonl'), '{"alarm":{"id":"cut sho');
    const garbage = Buffer.from('this is no database'.repeat(1000));
    await writeFile(join(folder, 'history.duckdb'), garbage);
    await writeFile(join(folder, 'archive/ottermere/2026/12/broken.parquet'), 'PAR1');

    const again = await history();
    expect(complaints.map(({ code }) => code)).toEqual(['STORE_CORRUPT', 'STORE_CORRUPT', 'STORE_CORRUPT']);
    expect(complaints[2]?.where).toContain('ledger.jsonl');
    expect(await again.openAlarms()).toEqual([answered]);
    expect(await again.noData('ottermere', 0, DAWN + DAY)).toEqual([hole]);
    await again.saveAlarms([anAlarm(DAWN + HOUR)]);
    expect(complaints[1]?.where).toContain('broken.parquet');
    const aside = (await readdir(folder)).find((name) => name.includes('damaged-20261202-051233-2'));
    expect(await readFile(join(folder, aside ?? ''))).toEqual(garbage);
    expect((await again.passages({})).rows.map(({ id }) => id)).toEqual([second.id, whole.id, thinned.id]);
    expect(await again.waveform(whole.id)).not.toBeNull();
    expect(await again.passage(thinned.id)).toEqual({ passage: thinned, hasWaveform: false });
    expect(again.versions('ottermere').map(({ version }) => version)).toEqual([1, 2]);
    expect(again.definitionAt('ottermere', 2)?.text).toBe(`${YAML}#`);
  });

  test('when damaged in the middle is found so at the start too', async () => {
    const store = await begun();
    for (let i = 0; i < 20; i++) await commit(store, { onMicros: DAWN + i * HOUR });
    await store.close();
    const bytes = await readFile(join(folder, 'history.duckdb'));
    bytes.fill(0x5a, 12_288);
    await writeFile(join(folder, 'history.duckdb'), bytes);
    const again = await history();
    expect(complaints.map(({ code }) => code)).toEqual(['STORE_CORRUPT']);
    expect((await again.passages({})).total).toBe(20);
  });

  test('when written by a newer program is left alone', async () => {
    await (await begun()).close();
    const database = await openDuckDb(join(folder, 'history.duckdb'));
    await database.transaction((ask) => ask(`UPDATE meta SET value = '99' WHERE name = 'schema'`));
    database.close();
    await expect(history()).rejects.toMatchObject({ code: 'STORE_NEWER' });
    expect((await readdir(folder)).filter((name) => name.includes('damaged'))).toEqual([]);
  });

  test('when its folder cannot be made says so', async () => {
    await writeFile(join(folder, 'in-the-way'), '');
    const blocked = history({ file: join(folder, 'in-the-way', 'history.duckdb') });
    await expect(blocked).rejects.toMatchObject({ code: 'STORE_WRITE' });
  });

  test('when the file is missing but the archive is there is filled from it', async () => {
    const store = await begun();
    const passage = await commit(store);
    await store.close();
    await rm(join(folder, 'history.duckdb'));
    expect(await (await history()).passage(passage.id)).toEqual({ passage, hasWaveform: true });
    expect(complaints).toEqual([]);
  });
});

describe('a disk that refuses', () => {
  test('is tried again until it takes the wave form, and the commit waits for it', async () => {
    await mkdir(join(folder, 'archive'));
    await writeFile(join(folder, 'archive/ottermere'), 'in the way');
    const pauses: number[] = [];
    const store = await begun({
      pause: async (ms) => {
        expect((await store.passages({})).total).toBe(0);
        if (pauses.push(ms) === 3) await rm(join(folder, 'archive/ottermere'));
      },
    });
    const passage = await commit(store);
    expect(pauses).toEqual([100, 200, 400]);
    expect(complaints.map(({ code }) => code)).toEqual(['STORE_WRITE', 'STORE_WRITE', 'STORE_WRITE']);
    expect(await store.waveform(passage.id)).not.toBeNull();
  });
});

describe('closing', () => {
  test('is idempotent, waits for what is held, and refuses what comes after', async () => {
    const store = await begun();
    const commits = Array.from({ length: 5 }, (_, i) => commit(store, { onMicros: DAWN + i * HOUR }));
    await Promise.all([store.close(), store.close()]);
    const outcomes = await Promise.allSettled(commits);
    await expect(store.saveAlarms([anAlarm()])).rejects.toMatchObject({ code: 'STORE_WRITE' });
    const again = await history();
    const total = outcomes.filter(({ status }) => status === 'fulfilled').length;
    expect((await again.passages({})).total).toBe(total);
    expect(existsSync(join(folder, 'history.duckdb.wal'))).toBe(false);
  });
});

describe('spectra', () => {
  test('are kept for an hour a sensor, in order and without echoes', async () => {
    const store = await begun();
    const line = (minute: number): Parameters<History['addSpectrum']>[0] => ({
      bridge: 'ottermere',
      sensor: 'A1',
      micros: DAWN + minute * 60 * S,
      stepHz: 0.25,
      psd: Float32Array.from([minute, 0.5]),
    });
    for (let minute = 0; minute < 70; minute++) store.addSpectrum(line(minute));
    store.addSpectrum(line(3));
    const view = store.spectra('ottermere', 'A1');
    expect(view?.lines).toHaveLength(60);
    expect(view?.lines.at(-1)).toEqual({ micros: DAWN + 69 * 60 * S, psd: [69, 0.5] });
    expect(store.spectra('ottermere', 'A9')).toBeNull();
  });
});
