import type { Alarm } from '../contract/alarm.ts';
import { isDeckAcceleration, spanAt, type BridgeDefinition, type Sensor, type Span } from '../contract/bridge.ts';
import type { ConditionCode } from '../contract/health.ts';
import type { ChannelMeasures, Passage } from '../contract/passage.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import type { DeskState } from './state.ts';

/** A neighbour that should have felt it reads at least this part of the value. */
const NEIGHBOUR_SHARE = 0.25;
/** Conditions that last until they are said to have ended; the others count against a crossing for a moment only. */
const LASTING: readonly ConditionCode[] = [
  'silent',
  'clock step',
  'clock drift',
  'rate wrong',
  'flat',
  'noise high',
  'offset drift',
  'twin channel',
];
const MOMENT_MICROS = 5 * MICROS_PER_SECOND;

/** The alarm with one more reason not to trust its sensor. Each is said once, in alphabetical order: none is the first. */
export function withDoubt(alarm: Alarm, reason: string): Alarm {
  return isSaid(alarm, reason) ? alarm : { ...alarm, doubt: [...reasonsOf(alarm), reason].toSorted().join('; ') };
}

const isSaid = (alarm: Alarm, reason: string): boolean => reasonsOf(alarm).includes(reason);

const reasonsOf = ({ doubt }: Alarm): string[] => (doubt === null ? [] : doubt.split('; '));

function without(alarm: Alarm, drop: (reason: string) => boolean): Alarm {
  const kept = reasonsOf(alarm).filter((reason) => !drop(reason));
  return { ...alarm, doubt: kept.length === 0 ? null : kept.join('; ') };
}

/** Said where one channel alone passed and no record could ask its neighbours. */
const ALONE = 'no other sensor passed';

/** The alarm of a passage that there is none of: a channel that passed alone is in doubt. */
export function aloneDoubt(alarm: Alarm): Alarm {
  return alarm.sensors.length > 1 ? alarm : withDoubt(alarm, ALONE);
}

/** The alarm without that doubt: another sensor passed, or a record will ask the neighbours. */
export function withoutAlone(alarm: Alarm): Alarm {
  return without(alarm, (reason) => reason === ALONE);
}

/** The alarm with the conditions of the sensor that it rests on, as far as they are known by now, and of no other. */
export function conditionsDoubt(state: DeskState, alarm: Alarm): Alarm {
  const own = alarm.sensor ?? '';
  return (state.conditions[own] ?? [])
    .filter(({ code, state, micros }) => {
      const lasts = state === 'began' && LASTING.includes(code);
      return lasts || alarm.raisedMicros - micros <= MOMENT_MICROS;
    })
    .reduce(
      (doubted, { code }) => withDoubt(doubted, marked(own, code)),
      without(alarm, (reason) => reason.includes(MARKED)),
    );
}

const MARKED = ' is marked "';
/** `A1 is marked "spike"` */
export const marked = (sensor: string, code: string): string => `${sensor}${MARKED}${code}"`;

/**
 * The alarm with what its passage's record says against its sensor: flags of the channel, and neighbours that felt
 * too little in the band of the alarm's limit.
 *
 * A neighbour is a trusted deck channel of the same span that stands where the first bending mode moves at least half
 * as much as at the sensor (half sine over the span); one beside a bearing has no say about midspan. Without neighbours
 * there is no doubt from them.
 */
export function recordDoubt(definition: BridgeDefinition, judged: Alarm, passage: Passage): Alarm {
  const alarm = passage.phases.foundBy === 'live level' ? withDoubt(judged, 'no train was recognised') : judged;
  const sensor = definition.sensors.find(({ id }) => id === alarm.sensor);
  if (sensor === undefined) return alarm;
  const own = passage.channels.find((channel) => channel.sensor === sensor.id);
  const flagged = own === undefined ? alarm : flaggedDoubt(alarm, own);
  const value = Math.max(alarm.liveValue ?? 0, usablePeak(own, alarm.rule) ?? 0);
  const highest = highestNeighbour(definition, sensor, passage, alarm.rule);
  if (highest === null || highest.value >= NEIGHBOUR_SHARE * value) return flagged;
  return withDoubt(
    flagged,
    `its neighbours did not feel it, the most was ${highest.value.toFixed(2)} m/s² at ${highest.sensor}`,
  );
}

/** The record has looked at the whole window: what it marks counts, and what only live suspected no longer does. */
function flaggedDoubt(alarm: Alarm, { sensor, flags }: ChannelMeasures): Alarm {
  return flags.reduce(
    (doubted, flag) => withDoubt(doubted, marked(sensor, flag)),
    without(alarm, (reason) => reason.includes(MARKED)),
  );
}

function highestNeighbour(
  definition: BridgeDefinition,
  sensor: Sensor,
  passage: Passage,
  limit: string,
): { sensor: string; value: number } | null {
  const span = spanAt(definition, sensor.alongM);
  const felt = passage.channels.flatMap((channel) => {
    const neighbour = definition.sensors.find(({ id }) => id === channel.sensor);
    const value = usablePeak(channel, limit);
    if (neighbour === undefined || neighbour.id === sensor.id || value === null || channel.flags.length > 0) return [];
    if (!isDeckAcceleration(neighbour) || spanAt(definition, neighbour.alongM).id !== span.id) return [];
    return ordinate(span, neighbour) >= 0.5 * ordinate(span, sensor) ? [{ sensor: neighbour.id, value }] : [];
  });
  return felt.reduce<(typeof felt)[number] | null>(
    (top, one) => (top === null || one.value > top.value ? one : top),
    null,
  );
}

/** Ordinate of the first bending mode of a simple span, 0 at its bearings and 1 at midspan. */
function ordinate(span: Span, sensor: Sensor): number {
  const x = Math.min(Math.max((sensor.alongM - span.startM) / span.lengthM, 0), 1);
  return Math.sin(Math.PI * x);
}

/** The peak of a channel in the band of a limit where it may be used; null where not, or where the limit does not hold. */
function usablePeak(channel: ChannelMeasures | undefined, limit: string): number | null {
  const peak = channel?.limits.find((said) => said.limit === limit)?.peak;
  return peak === undefined || peak.value === null || peak.quality === 'poor' ? null : peak.value;
}
