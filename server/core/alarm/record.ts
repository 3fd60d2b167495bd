import type { Alarm } from '../contract/alarm.ts';
import { isDeckAcceleration, type BridgeDefinition, type Limit } from '../contract/bridge.ts';
import type { ConditionCode } from '../contract/health.ts';
import { isLowerBound, type Measured } from '../contract/measure.ts';
import type { ChannelMeasures, LimitMeasures, Passage } from '../contract/passage.ts';
import { severityOf, severityRank, type Severity } from '../contract/severity.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { recordDoubt, withDoubt, withoutAlone } from './doubt.ts';
import { aboveInDay, said } from './level.ts';
import { giveBack, judge, letStand, raise } from './life.ts';
import { REMEMBERED_RECORDS, trimmed, withAlarm, type DeskState, type PassageAbove } from './state.ts';

const DAY_MICROS = 86_400 * MICROS_PER_SECOND;
/** Passages above a limit that are remembered; a day has some hundred. */
const REMEMBERED_ABOVE = 5000;

/** What the record of a passage says about one limit. */
type RecordOfLimit = RecordValue | { value: null; reason: string };

interface RecordValue {
  value: number;
  severity: Severity | null;
  sensor: string;
  micros: Micros;
  /** `doubtful`: no channel may be trusted. Such a value may confirm or raise, in doubt, and takes nothing back. */
  standing: 'whole' | 'lower bound' | 'doubtful';
}

/**
 * The record of a passage has come: each limit's alarm is confirmed or corrected, or raised where live saw nothing.
 * An excursion that still lasts goes on: only its channels' return, or the next train, ends it.
 */
export function onPassage(state: DeskState, passage: Passage, takenMicros: Micros): DeskState {
  const judged = state.definition.limits.reduce((now, limit) => judgedByLimit(now, limit, passage, takenMicros), state);
  return recorded(judged.passage?.id === passage.id ? { ...judged, passage: null } : judged, passage);
}

function recorded(state: DeskState, { id, startMicros, endMicros }: Passage): DeskState {
  if (state.records.some(({ passage }) => passage === id)) return state;
  const records = [...state.records, { passage: id, startMicros, endMicros }].slice(-REMEMBERED_RECORDS);
  return { ...state, records };
}

/**
 * The record's value for one limit: the largest peak of the deck channels that it holds for, each in the limit's own band.
 * A lower bound counts as what it is; other poor values only where there is nothing better.
 *
 * @param limit a limit of `definition`
 * @returns value in m/s² with the severity it reaches (null below all levels), or why there is none
 */
export function recordOfLimit(definition: BridgeDefinition, limit: Limit, passage: Passage): RecordOfLimit {
  const readings = passage.channels.flatMap((channel) => {
    const sensor = definition.sensors.find(({ id }) => id === channel.sensor);
    const said = limitOf(channel, limit.id);
    if (sensor === undefined || !isDeckAcceleration(sensor) || said?.peak.value == null) return [];
    const standing = standingOf(channel, said.peak);
    const micros = said.micros ?? passage.phases.onMicros;
    return [{ value: said.peak.value, sensor: sensor.id, micros, standing }];
  });
  const trusted = readings.filter(({ standing }) => standing !== 'doubtful');
  const [top] = (trusted.length > 0 ? trusted : readings).toSorted((a, b) => b.value - a.value);
  if (top !== undefined) return { ...top, severity: severityOf(top.value, limit.levels) };
  const { measured } = passage.peak;
  return { value: null, reason: measured.value === null ? measured.reason : 'no usable deck channel' };
}

const limitOf = ({ limits }: ChannelMeasures, limit: string): LimitMeasures | undefined =>
  limits.find((said) => said.limit === limit);

/** Flags that make a peak too small, never too large. */
const BOUNDING: readonly string[] = ['gap', 'clipped'] satisfies ConditionCode[];

function standingOf({ flags }: ChannelMeasures, peak: Measured): RecordValue['standing'] {
  if (peak.value !== null && peak.quality !== 'poor') return 'whole';
  return isLowerBound(peak) && flags.every((flag) => BOUNDING.includes(flag)) ? 'lower bound' : 'doubtful';
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
  if (isJudged(alarm, passage)) return alarm;
  const attached = {
    ...withoutAlone(alarm),
    passage: passage.id,
    passagesAboveInDay: aboveInDay(state, alarm.rule, alarm.raisedMicros, passage.id),
  };
  return said(state, recordDoubt(state.definition, judgement(attached, passage, record, takenMicros), passage));
}

const isJudged = ({ verdict, recordValue, passage: id }: Alarm, passage: Passage): boolean =>
  recordValue !== null || (verdict === 'inconclusive' && id === passage.id);

function judgement(alarm: Alarm, passage: Passage, record: RecordOfLimit, takenMicros: Micros): Alarm {
  const why = record.value === null ? `has no value (${record.reason})` : shortfall(alarm, passage, record);
  if (record.value === null || why !== null) {
    return letStand(alarm, 'inconclusive', { micros: passage.endMicros, takenMicros }, why);
  }
  return judgedBy(alarm, record, liveSeverity(alarm), takenMicros);
}

function judgedBy(alarm: Alarm, record: RecordValue, live: Severity | null, takenMicros: Micros): Alarm {
  const judged = judge(
    alarm,
    { ...record, atLeast: record.standing === 'lower bound' },
    live,
    takenMicros,
    record.sensor,
  );
  return record.standing === 'doubtful' ? withDoubt(judged, 'no channel of the record may be trusted') : judged;
}

/**
 * Why a record that reaches less than live saw cannot take it back; null where it can, or reaches as much.
 * A sensor whose record has holes may have felt in them what it told live, whatever the others say.
 */
function shortfall(alarm: Alarm, passage: Passage, record: RecordValue): string | null {
  if (severityRank(record.severity) >= severityRank(liveSeverity(alarm))) return null;
  const reached = `${record.value.toFixed(2)} m/s² at ${record.sensor}`;
  if (record.standing === 'doubtful') return `holds no channel that may be trusted (${reached})`;
  const short = alarm.sensors.find((sensor) => isIncomplete(passage, sensor, alarm.rule));
  return short === undefined ? null : `is incomplete at ${short} (the most it holds is ${reached})`;
}

function isIncomplete({ channels }: Passage, sensor: string, limit: string): boolean {
  const channel = channels.find((one) => one.sensor === sensor);
  const peak = channel === undefined ? undefined : limitOf(channel, limit)?.peak;
  return peak === undefined || peak.value === null || isLowerBound(peak);
}

function raisedFrom(
  state: DeskState,
  limit: Limit,
  passage: Passage,
  record: RecordValue & { severity: Severity },
  takenMicros: Micros,
): Alarm {
  const raised = raise(passage.bridge, 'level', limit.id, { ...record, takenMicros });
  const alarm = {
    ...raised,
    liveValue: null,
    passage: passage.id,
    passagesAboveInDay: aboveInDay(state, limit.id, record.micros, passage.id),
  };
  const judged = judgedBy(alarm, record, null, takenMicros);
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

/** Passages above the limit are counted; what no train did is none. */
function remembered(state: DeskState, limit: string, passage: Passage, record: RecordOfLimit): DeskState {
  if (passage.phases.foundBy === 'live level') return state;
  if (record.value === null || record.severity === null) return state;
  if (state.above.some((one) => one.passage === passage.id && one.limit === limit)) return state;
  const added: PassageAbove = { limit, passage: passage.id, micros: passage.phases.onMicros };
  const newest = Math.max(added.micros, ...state.above.map(({ micros }) => micros));
  const kept = [...state.above, added].filter(({ micros }) => micros >= newest - DAY_MICROS);
  return { ...state, above: kept.slice(-REMEMBERED_ABOVE) };
}
