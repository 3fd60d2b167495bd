import type { Alarm } from '#core/contract/alarm.ts';
import type { BridgeView } from '#core/contract/api.ts';
import { isDeckAcceleration, spanAt, type BridgeDefinition } from '#core/contract/bridge.ts';
import { refuse } from '#core/contract/errors.ts';
import type { BridgeStatus, SystemStatus } from '#core/contract/status.ts';
import type { Micros } from '#core/contract/time.ts';
import { bandOfLimit } from '#core/passage/band.ts';
import { rollingStepHz } from '#core/passage/rolling-spectrum.ts';
import { badComplaint, type BadDefinition } from './bridges.ts';
import type { History } from './history/store.ts';
import { recomputedOf } from './recomputed.ts';
import type { ComplaintLog } from './report.ts';
import { badStatus, type BridgeWatch } from './watch.ts';
import type { Backend } from './web/backend.ts';

export interface JoinedParts {
  watches: ReadonlyMap<string, BridgeWatch>;
  bad: readonly BadDefinition[];
  history: History;
  complaints: ComplaintLog;
  clock: () => Micros;
  started: string;
  broker: () => SystemStatus['broker'];
  journal: () => SystemStatus['journal'];
  viewers: () => number;
  durations: Backend['durations'];
  workersHeapBytes: Backend['workersHeapBytes'];
  /** A watch for a bridge that runs no more, so that its last alarms can be answered. */
  retired: (bridge: string) => BridgeWatch | null;
}

/** What the web asks, answered by watches and history. */
export function joinBackend(parts: JoinedParts): Backend {
  const { watches, bad, history, complaints, clock } = parts;
  const badStatuses = bad.map((one) => badStatus(one.id, badComplaint(one)));

  const bridges = (): BridgeStatus[] => [...[...watches.values()].map((watch) => watch.status()), ...badStatuses];

  const bridge = (id: string): BridgeView | null => {
    const watch = watches.get(id);
    if (watch === undefined) return null;
    return {
      status: watch.status(),
      definition: watch.definition,
      version: watch.version,
      versions: history.versions(id),
      sensors: watch.sensors(),
      bands: bandsOf(watch.definition),
    };
  };

  const definitionText = (id: string, version?: number): string | null => {
    const wanted = version ?? watches.get(id)?.version ?? history.versions(id).at(-1)?.version;
    return wanted === undefined ? null : (history.definitionAt(id, wanted)?.text ?? null);
  };

  const known = async (id: string): Promise<Alarm | null> => {
    for (const watch of watches.values()) {
      const alarm = watch.alarm(id);
      if (alarm !== null) return alarm;
    }
    return history.alarm(id);
  };

  return {
    systemStatus: () => ({
      started: parts.started,
      broker: parts.broker(),
      journal: parts.journal(),
      complaints: complaints.counts(),
      bridges: bridges(),
      viewers: parts.viewers(),
    }),
    bridges,
    bridge,
    definitionText,
    spectra(id, sensor) {
      const sensors = watches.get(id)?.definition.sensors ?? [];
      const wanted = sensors.find((each) => (sensor === undefined ? isDeckAcceleration(each) : each.id === sensor));
      if (wanted === undefined) return null;
      // In the first minute there is no line yet.
      const none = { sensor: wanted.id, stepHz: rollingStepHz(wanted.rateHz), lines: [] };
      return history.spectra(id, wanted.id) ?? none;
    },

    passages: (query) => history.passages(query),
    async days(query) {
      if (history.versions(query.bridge).length === 0) return refuse('NOT_FOUND', 'no bridge of this id', query.bridge);
      return { ok: true, value: await history.days(query) };
    },
    async passage(id) {
      const stored = await history.passage(id);
      if (stored === null) return null;
      const { passage, hasWaveform } = stored;
      const definition = history.definitionAt(passage.bridge, passage.provenance.definitionVersion);
      if (definition === null) return null;
      const [{ earlier, later }, alarms, alike] = await Promise.all([
        history.neighbours(id),
        history.alarmsOfPassage(id),
        history.alike(passage),
      ]);
      return { passage, definition: definition.definition, earlier, later, alarms, alike, hasWaveform };
    },
    async waveform(id) {
      const [stored, channels] = await Promise.all([history.passage(id), history.waveform(id)]);
      if (stored === null || channels === null) return null;
      const { bridge, provenance } = stored.passage;
      const given = history.definitionAt(bridge, provenance.definitionVersion);
      return given === null ? null : { passage: stored.passage, definition: given.definition, channels };
    },
    waveformFile: (id) => history.waveformFile(id),
    async recomputed(id) {
      const [stored, channels] = await Promise.all([history.passage(id), history.waveform(id)]);
      if (stored === null) return refuse('NOT_FOUND', 'no passage of this id', id);
      if (channels === null) return refuse('NOT_FOUND', 'its wave form is no longer kept', id);
      const { bridge, provenance } = stored.passage;
      const definition = history.definitionAt(bridge, provenance.definitionVersion);
      if (definition === null) return refuse('NOT_FOUND', 'its definition is not in the history', id);
      return recomputedOf(definition.definition, stored.passage, channels);
    },

    openAlarms: () => [...watches.values()].flatMap((watch) => watch.openAlarms()),
    alarms: (query) => history.alarms(query),
    alarm: known,
    async acknowledge(id, { by, note }, principal) {
      if (!principal.mayAcknowledge) return refuse('ORIGIN_REFUSED', `${principal.name} may not acknowledge`);
      const alarm = await known(id);
      if (alarm === null) return refuse('NOT_FOUND', 'no alarm of this id', id);
      const watch = watches.get(alarm.bridge) ?? parts.retired(alarm.bridge);
      if (watch === null) return refuse('NOT_FOUND', 'its bridge is not known', id);
      if (watch.alarm(id) === null) watch.recallAlarm(alarm);
      return watch.acknowledge(id, by, note);
    },

    errors: () => complaints.rows(),
    durations: parts.durations,
    workersHeapBytes: parts.workersHeapBytes,
    nowMicros: clock,
  };
}

/** The band of each limit; one entry for each different edge where its spans differ. */
function bandsOf(definition: BridgeDefinition): BridgeView['bands'] {
  return definition.limits.flatMap((limit) => {
    const edges = new Map<number, BridgeView['bands'][number]>();
    for (const sensor of definition.sensors.filter(isDeckAcceleration)) {
      if (limit.spans?.includes(spanAt(definition, sensor.alongM).id) === false) continue;
      const { upToHz, setBy } = bandOfLimit(definition, limit.band, sensor);
      edges.set(upToHz, { limit: limit.id, upToHz, setBy });
    }
    return [...edges.values()];
  });
}
