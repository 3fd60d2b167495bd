import type { Alarm } from '#core/contract/alarm.ts';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Complaint, Result } from '#core/contract/errors.ts';
import { accept } from '#core/contract/errors.ts';
import type { SensorCondition, SensorHealth } from '#core/contract/health.ts';
import type { PassageWindow, PipelineOutput } from '#core/contract/pipeline.ts';
import type { BridgeStatus } from '#core/contract/status.ts';
import { sampleMicros, type Micros } from '#core/contract/time.ts';
import { eventsOf, next, nextAll, openDesk, type DeskStart } from '#core/alarm/desk.ts';
import { stretchMicros } from '#core/alarm/fault.ts';
import { isActive } from '#core/alarm/life.ts';
import { silenceOf } from '#core/alarm/silence.ts';
import type { DeskEffect, DeskEvent, DeskState, DeskStep, NoData } from '#core/alarm/state.ts';
import type { BridgeMemory } from './snapshot.ts';
import {
  createHealthRecord,
  healthView,
  isAlive,
  noteCondition,
  noteReading,
  noteSamples,
  noteVitals,
  silenceOfSensor,
  type HealthRecord,
} from './sensor-health.ts';

/** What a bridge asks of the program: said to the pages at once, and kept. */
export interface WatchEffects {
  /** Alarms as they now are. Those that a finished passage changed come with it and are committed together. */
  alarms(alarms: readonly Alarm[], publish: boolean): Promise<void>;
  passage(window: PassageWindow, alarms: readonly Alarm[], replayed: boolean): Promise<void>;
  noData(noData: NoData): Promise<void>;
  health(bridge: string, sensors: SensorHealth[]): void;
}

/** One bridge as the running server sees it: alarm desk, health of its sensors, how it stands. */
export interface BridgeWatch {
  readonly definition: BridgeDefinition;
  readonly version: number;
  /** A block is about to go into the pipeline. `receivedMicros` is given where it comes out of the journal. */
  given(block: SampleBlock, receivedMicros: Micros | null): void;
  /** What came out of the pipeline, `replayed` out of the journal; resolves when all that follows from it is durable. */
  take(output: PipelineOutput, replayed: boolean): Promise<void> | null;
  /** The wall clock went on. */
  tick(): void;
  acknowledge(alarm: string, by: string, note: string): Promise<Result<Alarm>>;
  /** An alarm was taken by the broker. */
  published(alarm: string): void;
  /** An alarm that only the history still holds. */
  recallAlarm(alarm: Alarm): void;
  openAlarms(): Alarm[];
  alarm(id: string): Alarm | null;
  status(): BridgeStatus;
  sensors(): SensorHealth[];
  remember(): BridgeMemory;
  recall(memory: BridgeMemory): void;
}

export interface WatchStart extends Pick<DeskStart, 'alarms' | 'above'> {
  definition: BridgeDefinition;
  version: number;
  lastPassage: string | null;
  clock: () => Micros;
  effects: WatchEffects;
  report: (complaint: Complaint) => void;
}

export function createWatch(start: WatchStart): BridgeWatch {
  const { definition, version, clock, effects, report, alarms = [], above = [] } = start;
  let desk: DeskState = openDesk({ definition, alarms, above, nowMicros: clock() });
  let health: HealthRecord = createHealthRecord(definition);
  let lastPassage = start.lastPassage;
  let counted: { alarms: DeskState['alarms']; open: Alarm[] } | null = null;

  const openedMicros = clock();
  /** Of a sensor: whether its silence was told to have begun or ended, and from when on it is waited for. */
  const told = new Map<string, SensorCondition['state']>();
  const awaited = new Map<string, Micros>();

  const openAlarms = (): Alarm[] => {
    if (counted?.alarms !== desk.alarms) {
      counted = { alarms: desk.alarms, open: Object.values(desk.alarms).filter(({ state }) => state !== 'normal') };
    }
    return counted.open;
  };
  /** Takes the desk's new state and does what it asks, except what goes with a passage. */
  const act = (step: DeskStep): { changed: Alarm[]; publish: boolean; kept: Promise<void>[] } => {
    desk = step.state;
    const changed = new Map<string, Alarm>();
    const kept: Promise<void>[] = [];
    let publish = false;
    for (const effect of step.effects) {
      if (effect.kind === 'alarm') {
        changed.set(effect.alarm.id, effect.alarm);
        publish ||= effect.publish;
      } else if (effect.kind === 'no data') kept.push(effects.noData(effect.noData));
    }
    return { changed: [...changed.values()], publish, kept };
  };
  const settle = (step: DeskStep): Promise<void>[] => {
    const { changed, publish, kept } = act(step);
    return changed.length === 0 ? kept : [...kept, effects.alarms(changed, publish)];
  };
  const event = (deskEvent: DeskEvent, nowMicros: Micros = clock()): Promise<void>[] =>
    settle(next(desk, deskEvent, nowMicros));

  /**
   * A sensor that is silent while its logger sends: the pipeline cannot know, since its samples make no time pass.
   * Said when it changes; what was said in an earlier run, its alarm remembers.
   */
  const watchSensors = (): void => {
    const nowMicros = clock();
    for (const sensor of definition.sensors) {
      if (silenceOf(desk, sensor.logger) !== null) awaited.set(sensor.id, nowMicros);
      const condition = silenceOfSensor(health, definition, sensor, awaited.get(sensor.id) ?? openedMicros, nowMicros);
      if (condition === null || told.get(sensor.id) === condition.state) continue;
      told.set(sensor.id, condition.state);
      quietly(event({ kind: 'condition', condition: afterAlarm(desk, condition) }));
    }
  };
  const hear = (block: SampleBlock, toMicros: Micros, receivedMicros: Micros | null): void => {
    const { logger, startMicros } = block;
    if (receivedMicros !== null) {
      const silence = silenceOf(desk, logger);
      // Out of the journal, from before the silence began: it does not end it.
      if (silence !== null && silence.raisedMicros >= toMicros) return;
    }
    quietly(event({ kind: 'heard', logger, fromMicros: startMicros, toMicros }, receivedMicros ?? clock()));
  };

  return {
    definition,
    version,
    given(block, receivedMicros) {
      const heard = receivedMicros ?? clock();
      let length = 0;
      for (const { sensor, samples } of block.channels) {
        length = Math.max(length, samples.length);
        // A channel without a single number is as good as silent.
        if (samples.every(Number.isNaN)) continue;
        const newest = sampleMicros(block.startMicros, samples.length - 1, block.rateHz);
        noteSamples(health, sensor, samples.length, newest, heard);
      }
      if (length > 0) hear(block, sampleMicros(block.startMicros, length, block.rateHz), receivedMicros);
    },
    take(output, replayed) {
      const { passages, health: conditions, vitals } = output;
      for (const condition of conditions) noteCondition(health, condition);
      for (const one of vitals) noteVitals(health, one);
      for (const samples of output.live) noteReading(health, samples);
      if (conditions.length + vitals.length > 0) effects.health(definition.id, healthView(health, definition, clock()));
      const kept: Promise<void>[] = [];
      // A block finishes one passage at most, save for replays in large blocks: each is committed with its own alarms.
      const events = eventsOf(definition.id, output);
      let from = 0;
      for (const window of passages) {
        const at = events.findIndex((one) => one.kind === 'passage' && one.passage === window.passage) + 1;
        const { changed, kept: others } = act(nextAll(desk, events.slice(from, at), clock()));
        from = at;
        lastPassage = window.passage.id;
        kept.push(...others, effects.passage(window, changed, replayed));
      }
      if (from < events.length) kept.push(...settle(nextAll(desk, events.slice(from), clock())));
      return kept.length === 0 ? null : Promise.all(kept).then(() => undefined);
    },
    tick() {
      quietly(event({ kind: 'tick' }));
      watchSensors();
    },
    async acknowledge(alarm, by, note) {
      const step = next(desk, { kind: 'acknowledge', alarm, by, note }, clock());
      const refusal = step.effects.find(
        (effect): effect is Extract<DeskEffect, { kind: 'refused' }> => effect.kind === 'refused',
      );
      if (refusal !== undefined) return { ok: false, complaint: refusal.complaint };
      await Promise.all(settle(step));
      return accept(desk.alarms[alarm]!);
    },
    published: (alarm) => quietly(event({ kind: 'published', alarm })),
    recallAlarm: (alarm) => quietly(event({ kind: 'recall', alarm })),
    openAlarms,
    alarm: (id) => desk.alarms[id] ?? null,
    status: () => statusOf(definition, desk, health, openAlarms(), lastPassage, clock()),
    sensors: () => healthView(health, definition, clock()),
    remember: () => ({
      loggers: Object.fromEntries(Object.entries(desk.loggers).map(([id, { newestMicros }]) => [id, newestMicros])),
      sensors: [...health.sensors.values()],
    }),
    recall({ loggers, sensors }) {
      health = createHealthRecord(definition, sensors, health.heardMicros);
      const heardMicros = clock();
      const known: Record<string, { newestMicros: Micros; heardMicros: Micros }> = {};
      for (const [id, newestMicros] of Object.entries(loggers)) known[id] = { newestMicros, heardMicros };
      const conditions = conditionsOf(definition.id, sensors);
      desk = { ...desk, loggers: { ...known, ...desk.loggers }, conditions, openedSecond: -1 };
      told.clear();
    },
  };

  /** What fails here has been reported by the history, which tries again by itself. */
  function quietly(kept: Promise<void>[]): void {
    for (const one of kept) {
      one.catch((failure: unknown) => {
        report({ code: 'STORE_WRITE', where: definition.id, detail: String(failure) });
      });
    }
  }
}

/** Samples that come again end a silence even where the logger's clock went back meanwhile. */
function afterAlarm({ alarms }: DeskState, condition: SensorCondition): SensorCondition {
  if (condition.state !== 'ended') return condition;
  const begun = Object.values(alarms).flatMap((alarm) =>
    alarm.kind === 'sensor' && alarm.rule === condition.sensor && isActive(alarm) ? [stretchMicros(alarm)] : [],
  );
  return { ...condition, micros: Math.max(condition.micros, ...begun) };
}

/** What held when the snapshot was taken; the pipeline that goes on from it will say when it ends. */
function conditionsOf(bridge: string, sensors: readonly SensorHealth[]): DeskState['conditions'] {
  return Object.fromEntries(
    sensors.map(({ sensor, active }) => [
      sensor,
      active.map(({ code, sinceMicros, detail }) => {
        return { bridge, sensor, code, state: 'began' as const, micros: sinceMicros, detail };
      }),
    ]),
  );
}

function statusOf(
  definition: BridgeDefinition,
  desk: DeskState,
  health: HealthRecord,
  open: readonly Alarm[],
  lastPassage: string | null,
  nowMicros: Micros,
): BridgeStatus {
  const alive = definition.sensors.filter((sensor) => isAlive(health, definition, sensor, nowMicros)).length;
  const newest = Math.max(0, ...[...health.sensors.values()].map(({ newestMicros }) => newestMicros ?? 0));
  const waiting = open.filter(({ state }) => state !== 'acknowledged');
  const count = (severity: Alarm['severity']): number => waiting.filter((alarm) => alarm.severity === severity).length;
  return {
    id: definition.id,
    name: definition.name,
    line: definition.line.name,
    chainageKm: definition.chainageKm,
    monitoring:
      alive === definition.sensors.length
        ? 'measuring'
        : alive > 0
          ? 'partly measuring'
          : newest === 0
            ? 'no data yet'
            : 'no data',
    channels: definition.sensors.length,
    channelsAlive: alive,
    newestMicros: newest === 0 ? null : newest,
    passageInProgress: desk.passage?.leftMicros === null ? desk.passage.id : null,
    lastPassage,
    unacknowledged: { AL: count('AL'), IL: count('IL'), IAL: count('IAL') },
    complaint: null,
  };
}

/** How a bridge stands whose definition cannot be used. */
export function badStatus(id: string, complaint: string): BridgeStatus {
  return {
    id,
    name: id,
    line: '',
    chainageKm: 0,
    monitoring: 'bad definition',
    channels: 0,
    channelsAlive: 0,
    newestMicros: null,
    passageInProgress: null,
    lastPassage: null,
    unacknowledged: { AL: 0, IL: 0, IAL: 0 },
    complaint,
  };
}
