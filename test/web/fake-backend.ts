import type { Alarm } from '#core/contract/alarm.ts';
import type { PassageRow } from '#core/contract/api.ts';
import type { BridgeStatus, SystemStatus } from '#core/contract/status.ts';
import { accept, refuse } from '#core/contract/errors.ts';
import type { Backend } from '../../server/web/backend.ts';
import { aDefinition, anAlarm, aPassage, aWindow, DAWN } from '../support/specimen.ts';

/** One invented bridge with one passage and one alarm, all in memory. */
export function fakeBackend(): Backend & { alarmsById: Map<string, Alarm> } {
  const definition = aDefinition();
  const passage = aPassage({ peaks: { A1: 2.9, A2: 2.1, A3: 0.7, A4: 0.2 } });
  const channels = aWindow(passage);
  const alarm = anAlarm(DAWN, 'IL', { passage: passage.id });
  const alarmsById = new Map([[alarm.id, alarm]]);
  const status = (): BridgeStatus => ({
    id: definition.id,
    name: definition.name,
    line: definition.line.name,
    chainageKm: definition.chainageKm,
    monitoring: 'measuring',
    channels: 5,
    channelsAlive: 5,
    newestMicros: DAWN,
    passageInProgress: null,
    lastPassage: passage.id,
    unacknowledged: { AL: 0, IL: 1, IAL: 0 },
    complaint: null,
  });
  const system = (): SystemStatus => ({
    started: '2026-12-01T05:00:00.000Z',
    broker: { kind: 'embedded', connected: true, address: 'mqtt://127.0.0.1:1883' },
    journal: { bytes: 1000, oldestMicros: DAWN, full: false },
    complaints: { TIME_IN_FUTURE: 2 },
    bridges: [status()],
    viewers: 0,
  });
  const row: PassageRow = {
    id: passage.id,
    bridge: passage.bridge,
    onMicros: DAWN,
    peak: 2.9,
    sensor: 'A1',
    severity: 'IL',
    ofGravest: 2.9 / 3.5,
    speedMs: 44.4,
    direction: 'rising',
    axles: 32,
    f1Hz: 5.2,
    zeta1: 0.013,
    temperatureC: null,
    quality: 'good',
    alarm: alarm.id,
  };
  const only = <T>(id: string, value: T): T | null => (id === passage.id ? value : null);
  return {
    alarmsById,
    systemStatus: system,
    bridges: () => [status()],
    bridge: (id) =>
      id === definition.id
        ? {
            status: status(),
            definition,
            version: 1,
            versions: [{ version: 1, sinceMicros: DAWN }],
            sensors: [
              { sensor: 'A1', newestMicros: DAWN, samples: 10, active: [], counts: { gap: 1 }, noise: 0.01, offset: 0 },
            ],
            bands: [{ limit: 'ballast', upToHz: 46.8, setBy: 'f3' }],
          }
        : null,
    definitionText: (bridge, version = 1) => (bridge === definition.id && version === 1 ? 'spanbeat: 1\n' : null),
    spectra: (bridge, sensor = 'A1') =>
      bridge === definition.id ? { sensor, stepHz: 0.25, lines: [{ micros: DAWN, psd: [0, 1, 2] }] } : null,
    passages: () => Promise.resolve({ rows: [row], total: 1, next: null }),
    days: ({ bridge }) =>
      Promise.resolve(bridge === definition.id ? accept([]) : refuse('NOT_FOUND', 'no bridge of this id', bridge)),
    passage: (id) =>
      Promise.resolve(
        only(id, {
          passage,
          definition,
          earlier: null,
          later: null,
          alarms: [...alarmsById.values()],
          alike: [row],
          hasWaveform: true,
        }),
      ),
    waveform: (id) => Promise.resolve(only(id, { passage, definition, channels })),
    waveformFile: (id) => Promise.resolve(only(id, import.meta.filename)),
    recomputed: (id) =>
      Promise.resolve(
        id === passage.id ? accept({ same: true, differences: [], passage }) : refuse('NOT_FOUND', 'no passage', id),
      ),
    openAlarms: () => [...alarmsById.values()],
    alarms: () => Promise.resolve([...alarmsById.values()]),
    alarm: (id) => Promise.resolve(alarmsById.get(id) ?? null),
    acknowledge(id, { by, note }) {
      const known = alarmsById.get(id);
      if (known === undefined) return Promise.resolve(refuse<Alarm>('NOT_FOUND', 'no alarm of this id', id));
      if (known.acknowledged !== null) return Promise.resolve(refuse<Alarm>('ALARM_STATE', 'acknowledged already', id));
      const answered: Alarm = { ...known, state: 'acknowledged', acknowledged: { micros: DAWN, by, note } };
      alarmsById.set(id, answered);
      return Promise.resolve(accept(answered));
    },
    errors: () => [{ code: 'TIME_IN_FUTURE', what: 'w', remedy: 'r', count: 2, last: null }],
    durations: () => [
      { stage: 'queue', count: 7, p50Ms: 0.5, p99Ms: 20, longestMs: 40 },
      { stage: 'tell', count: 0, p50Ms: NaN, p99Ms: NaN, longestMs: NaN },
    ],
    workersHeapBytes: () => Promise.resolve(9_000_000),
    nowMicros: () => DAWN,
  };
}
