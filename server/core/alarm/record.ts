import type { Alarm } from '../contract/alarm.ts';
import { isDeckAcceleration, spanAt, type BridgeDefinition, type Limit } from '../contract/bridge.ts';
import type { Passage } from '../contract/passage.ts';
import { severityOf, severityRank, type Severity } from '../contract/severity.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { bandPeak, recordDoubt, withDoubt, withTrain } from './doubt.ts';
import { aboveInDay, said } from './level.ts';
import { giveBack, judge, raise } from './life.ts';
import { trimmed, withAlarm, type DeskState, type PassageAbove } from './state.ts';

const DAY_MICROS = 86_400 * MICROS_PER_SECOND;
/** Passages above a limit that are remembered; a day has some hundred. */
const REMEMBERED_ABOVE = 5000;

/** What the record of a passage says about one limit. */
type RecordOfLimit =
  { value: number; severity: Severity | null; sensor: string | null; micros: Micros } | { value: null; reason: string };

/**
 * The record of a passage has come: each limit's alarm is confirmed or corrected, or raised where live saw nothing.
 * An excursion that still lasts goes on: only its channels' return, or the next train, ends it.
 */
export function onPassage(state: DeskState, passage: Passage, takenMicros: Micros): DeskState {
  const judged = state.definition.limits.reduce((now, limit) => judgedByLimit(now, limit, passage, takenMicros), state);
  return judged.passage?.id === passage.id ? { ...judged, passage: null } : judged;
}

/**
 * The record's value for one limit: the passage's own peak where that is the limit it was held against, else the largest
 * usable band peak of the deck channels on the limit's spans.
 *
 * @param limit a limit of `definition`
 * @returns value in m/s² with the severity it reaches (null below all levels), or why there is none
 */
export function recordOfLimit(definition: BridgeDefinition, limit: Limit, passage: Passage): RecordOfLimit {
  const { peak } = passage;
  if (peak.limit === limit.id && peak.measured.value !== null) {
    const micros = peak.micros ?? passage.phases.onMicros;
    return { value: peak.measured.value, severity: peak.severity, sensor: peak.sensor, micros };
  }
  const felt = passage.channels.flatMap((channel) => {
    const sensor = definition.sensors.find(({ id }) => id === channel.sensor);
    const value = bandPeak(channel);
    if (sensor === undefined || value === null || !isDeckAcceleration(sensor)) return [];
    if (limit.spans !== undefined && !limit.spans.includes(spanAt(definition, sensor.alongM).id)) return [];
    return [{ value, sensor: sensor.id, micros: channel.bandPeakMicros ?? passage.phases.onMicros }];
  });
  const [first, ...others] = felt;
  if (first === undefined) {
    return { value: null, reason: peak.measured.value === null ? peak.measured.reason : 'no usable deck channel' };
  }
  const top = others.reduce((best, one) => (one.value > best.value ? one : best), first);
  return { ...top, severity: severityOf(top.value, limit.levels) };
}

/** The gravest severity that the live signal reached; null where live saw nothing. */
export function liveSeverity(alarm: Alarm): Severity | null {
  if (alarm.liveValue === null) return null;
  return alarm.steps
    .filter(({ what }) => what === 'raised' || what === 'escalated')
    .reduce<Severity | null>(
      (top, { severity }) => (severityRank(severity) > severityRank(top) ? severity : top),
      null,
    );
}

function judgedByLimit(state: DeskState, limit: Limit, passage: Passage, takenMicros: Micros): DeskState {
  const record = recordOfLimit(state.definition, limit, passage);
  const known = alarmOf(state, limit.id, passage);
  const next = remembered(state, limit.id, passage, record);
  if (known !== null) return withAlarm(next, judgedAlarm(next, known, passage, record, takenMicros));
  if (record.value === null || record.severity === null) return next;
  return trimmed(
    withAlarm(next, raisedFrom(next, limit, passage, { ...record, severity: record.severity }, takenMicros)),
  );
}

function judgedAlarm(
  state: DeskState,
  alarm: Alarm,
  passage: Passage,
  record: RecordOfLimit,
  takenMicros: Micros,
): Alarm {
  if (alarm.recordValue !== null) return alarm;
  if (record.value === null && (alarm.doubt ?? '').includes(unmeasured(record.reason))) return alarm;
  const attached = {
    ...withTrain(alarm),
    passage: passage.id,
    passagesAboveInDay: aboveInDay(state, alarm.rule, alarm.raisedMicros, passage.id),
  };
  const judged =
    record.value === null
      ? withDoubt(attached, unmeasured(record.reason))
      : judge(attached, record, liveSeverity(alarm), takenMicros, record.sensor);
  return said(state, recordDoubt(state.definition, judged, passage));
}

const unmeasured = (reason: string): string => `the record has no value: ${reason.replaceAll('; ', ', ')}`;

function raisedFrom(
  state: DeskState,
  limit: Limit,
  passage: Passage,
  record: { value: number; severity: Severity; sensor: string | null; micros: Micros },
  takenMicros: Micros,
): Alarm {
  const raised = raise(passage.bridge, 'level', limit.id, { ...record, takenMicros });
  const alarm = {
    ...raised,
    liveValue: null,
    passage: passage.id,
    passagesAboveInDay: aboveInDay(state, limit.id, record.micros, passage.id),
  };
  const judged = judge(alarm, record, null, takenMicros, record.sensor);
  return said(state, recordDoubt(state.definition, giveBack(judged, passage.endMicros, takenMicros), passage));
}

/** The alarm of this passage and limit: the one that names it, else the largest without a passage in its window. */
function alarmOf(state: DeskState, limit: string, passage: Passage): Alarm | null {
  const alarms = Object.values(state.alarms).filter((alarm) => alarm.kind === 'level' && alarm.rule === limit);
  const named = alarms.find((alarm) => alarm.passage === passage.id);
  if (named !== undefined) return named;
  const within = alarms.filter(
    (alarm) =>
      alarm.passage === null && alarm.raisedMicros >= passage.startMicros && alarm.raisedMicros <= passage.endMicros,
  );
  const value = ({ liveValue }: Alarm): number => liveValue ?? 0;
  return within.toSorted((a, b) => value(b) - value(a))[0] ?? null;
}

function remembered(state: DeskState, limit: string, passage: Passage, record: RecordOfLimit): DeskState {
  if (record.value === null || record.severity === null) return state;
  if (state.above.some((one) => one.passage === passage.id && one.limit === limit)) return state;
  const added: PassageAbove = { limit, passage: passage.id, micros: passage.phases.onMicros };
  const newest = Math.max(added.micros, ...state.above.map(({ micros }) => micros));
  const kept = [...state.above, added].filter(({ micros }) => micros >= newest - DAY_MICROS);
  return { ...state, above: kept.slice(-REMEMBERED_ABOVE) };
}
