import { axleTracks, bridgeLengthM, countsAxles, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import { counted } from '../contract/counted.ts';
import { measured, notMeasurable, type Measured } from '../contract/measure.ts';
import type { Axle, Direction } from '../contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { mad, median, quantile } from '../signal/robust.ts';
import { microsOf, type RecordChannel } from './record.ts';

/** What the axle sensors of a passage say, with hindsight. */
export interface AxleReading {
  /** How many tracks saw axles. */
  trains: number;
  count: Measured;
  axles: Axle[];
  speedMs: Measured;
  direction: Direction | null;
  /** First axle at the first bearing it meets, last axle at the last; null where they cannot be told. */
  onMicros: Micros | null;
  offMicros: Micros | null;
  /** First and last pulse of any sensor, for what can be said without a second sensor. */
  firstPulse: Micros | null;
  lastPulse: Micros | null;
  /** How many sensors saw axles enough for a train, whether they agree or not. */
  heardBy: number;
  notes: string[];
}

export interface Pulse {
  micros: Micros;
  height: number;
}

/** The lightest train on two bogies. */
const TRAIN_AXLES_LEAST = 4;

/** Standing uncertainty of a sensor's place along the bridge, m: tape and eye (common practice). */
const PLACE_ERROR_M = 0.02;

/** Reads the axle sensors of each track; two tracks that both saw axles are two trains at once, and that is said. */
export function readAxles(bridge: BridgeDefinition, record: readonly RecordChannel[]): AxleReading {
  const tracks = axleTracks(bridge).map((track) => listening(track, record));
  const seen = tracks.flatMap((channels) => readTrack(bridge, placesOf(channels), channels.length) ?? []);
  // Of two sensors on one track one alone may err, where another track has told of a whole train.
  const certain = seen.filter(({ lonely }) => !lonely);
  const told = certain.some(({ onMicros }) => onMicros !== null) ? certain : seen;
  const [only, other] = told;
  if (only === undefined) return nothingSeen(whySilent(bridge, record));
  const reading = other === undefined ? only : together(told);
  const doubted = seen.filter((each) => !told.includes(each)).flatMap(({ notes }) => notes);
  return { ...reading, notes: [...reading.notes, ...doubted.map((note) => `${note}: not believed`)] };
}

function listening(track: readonly Sensor[], record: readonly RecordChannel[]): RecordChannel[] {
  return record.filter(
    (channel) => track.some(({ id }) => id === channel.sensor.id) && !channel.flags.includes('flat'),
  );
}

function placesOf(channels: readonly RecordChannel[]): Place[] {
  return channels
    .map((channel) => ({ alongM: channel.sensor.alongM, id: channel.sensor.id, pulses: axlePulses(channel) }))
    .filter(({ pulses }) => pulses.length > 0)
    .sort((a, b) => a.alongM - b.alongM);
}

/** A reading of one track; lonely where one sensor spoke and another that listens there did not. */
interface TrackReading extends AxleReading {
  lonely: boolean;
}

function readTrack(bridge: BridgeDefinition, places: readonly Place[], listeners: number): TrackReading | null {
  const first = places[0];
  const last = places.at(-1);
  if (first === undefined || last === undefined) return null;
  const all = places.flatMap(({ pulses }) => pulses.map(({ micros }) => micros));
  const heardBy = places.filter(({ pulses }) => pulses.length >= TRAIN_AXLES_LEAST).length;
  const nothing = {
    ...nothingSeen(SAW_NOTHING),
    trains: 1,
    firstPulse: Math.min(...all),
    lastPulse: Math.max(...all),
    heardBy,
  };
  if (last.alongM - first.alongM < 1)
    return { ...oneSensor(nothing, first.pulses, first.id), lonely: places.length < listeners };
  return { ...pairSensors(nothing, bridge, first, last), lonely: false };
}

const SAW_NOTHING = 'the axle sensors saw nothing';

/** A recording, and a logger that fails, may lack what the bridge has. */
function whySilent(bridge: BridgeDefinition, record: readonly RecordChannel[]): string {
  if (!bridge.sensors.some(countsAxles)) return 'the bridge has no axle sensor';
  const recorded = record.filter(({ axles }) => axles);
  if (recorded.length === 0) return 'no samples of the axle sensors';
  return recorded.every(({ flags }) => flags.includes('flat')) ? 'the axle sensors give no signal' : SAW_NOTHING;
}

function nothingSeen(reason: string): AxleReading {
  return {
    trains: 0,
    count: notMeasurable(reason),
    axles: [],
    speedMs: notMeasurable('no two axle sensors saw the train'),
    direction: null,
    onMicros: null,
    offMicros: null,
    firstPulse: null,
    lastPulse: null,
    heardBy: 0,
    notes: [],
  };
}

/** Trains on several tracks at once: one occupation of the bridge, from the first axle to the last. */
function together(readings: readonly AxleReading[]): AxleReading {
  const times = (pick: (reading: AxleReading) => Micros | null): Micros[] =>
    readings.map(pick).filter((micros) => micros !== null);
  const whole = readings.every(({ onMicros, offMicros }) => onMicros !== null && offMicros !== null);
  const words = readings.map(({ count, direction, speedMs }) => {
    const speed = speedMs.value === null ? 'at unknown speed' : `at ${speedMs.value.toFixed(1)} m/s`;
    return `${count.value === null ? 'some axles' : counted(count.value, 'axle')} ${direction === null ? '' : `towards ${direction} chainage `}${speed}`;
  });
  const reason = `${readings.length} trains at once: ${words.join('; ')}`;
  const axles = readings.reduce((sum, { count }) => sum + (count.value ?? 0), 0);
  return {
    trains: readings.length,
    count: measured(axles, null, 'usable', reason),
    axles: readings.flatMap((reading) => reading.axles).sort((a, b) => a.micros - b.micros),
    speedMs: notMeasurable(reason),
    direction: null,
    onMicros: whole ? Math.min(...times(({ onMicros }) => onMicros)) : null,
    offMicros: whole ? Math.max(...times(({ offMicros }) => offMicros)) : null,
    firstPulse: Math.min(...times(({ firstPulse }) => firstPulse)),
    lastPulse: Math.max(...times(({ lastPulse }) => lastPulse)),
    heardBy: readings.reduce((sum, { heardBy }) => sum + heardBy, 0),
    notes: [reason, ...readings.flatMap(({ notes }) => notes)],
  };
}

function oneSensor(nothing: AxleReading, pulses: Pulse[], id: string): AxleReading {
  return {
    ...nothing,
    count: measured(pulses.length, null, 'usable', `counted on ${id} alone`),
    notes: [`only axle sensor ${id} saw the train`],
  };
}

interface Place {
  alongM: number;
  id: string;
  pulses: Pulse[];
}

function pairSensors(nothing: AxleReading, bridge: BridgeDefinition, low: Place, high: Place): AxleReading {
  const { pairs, complete, axles: count } = matchPulses(low.pulses, high.pulses);
  const notes: string[] = [];
  if (pairs.length === 0)
    return {
      ...oneSensor(nothing, longer(low, high).pulses, longer(low, high).id),
      notes: ['the axle sensors do not agree'],
    };
  const base = high.alongM - low.alongM;
  const delays = pairs.map(([a, b]) => (b.micros - a.micros) / MICROS_PER_SECOND);
  const rising = median(delays) > 0;
  const speeds = delays.map((delay) => base / Math.abs(delay));
  const speed = base / Math.abs(median(delays));
  const spread = pairs.length > 1 ? (1.4826 * mad(speeds)) / Math.sqrt(pairs.length) : speed * 0.02;
  const even = pairs.length < 2 || Math.max(...speeds) / Math.min(...speeds) < 1.2;
  const meanSpeed = even ? base / Math.abs(mean(delays)) : speed;
  const error = Math.hypot(spread, (speed * Math.SQRT2 * PLACE_ERROR_M) / base);
  if (!even)
    notes.push(`speed varied from ${quantile(speeds, 0.1).toFixed(1)} to ${quantile(speeds, 0.9).toFixed(1)} m/s`);
  if (!complete) notes.push(`${low.id} saw ${counted(low.pulses.length, 'axle')}, ${high.id} ${high.pulses.length}`);
  const axles = placeAxles(pairs, speeds);
  const [entry, exit] = rising ? [low, high] : [high, low];
  const lengthM = bridgeLengthM(bridge);
  const moving = quantile(speeds, 0.9);
  const near = (group: readonly number[], pulses: readonly Pulse[]): number => {
    const fast = group.filter((v) => v > moving / 2);
    return Math.max(fast.length > 0 ? median(fast) : moving, bogieSpeed(pulses));
  };
  const beforeM = rising ? entry.alongM : lengthM - entry.alongM;
  const afterM = rising ? lengthM - exit.alongM : exit.alongM;
  return {
    trains: 1,
    count: complete ? measured(pairs.length, 0) : measured(count, null, 'usable', notes.at(-1) ?? ''),
    axles,
    speedMs: even
      ? measured(meanSpeed, error, complete ? 'good' : 'usable', complete ? undefined : notes.at(-1))
      : measured(speed, error, 'usable', notes[0]),
    direction: rising ? 'rising' : 'falling',
    onMicros: Math.round(
      entry.pulses[0]!.micros - (beforeM / near(speeds.slice(0, 4), entry.pulses.slice(0, 4))) * MICROS_PER_SECOND,
    ),
    offMicros: Math.round(
      exit.pulses.at(-1)!.micros + (afterM / near(speeds.slice(-4), exit.pulses.slice(-4))) * MICROS_PER_SECOND,
    ),
    firstPulse: nothing.firstPulse,
    lastPulse: nothing.lastPulse,
    heardBy: nothing.heardBy,
    notes,
  };
}

/** No bogie is shorter than this, m: two pulses in quick succession give a least speed, also of a train that then stood. */
const SHORTEST_WHEELBASE_M = 1.8;

function bogieSpeed(pulses: readonly Pulse[]): number {
  let shortest = Infinity;
  for (let i = 1; i < pulses.length; i++) shortest = Math.min(shortest, pulses[i]!.micros - pulses[i - 1]!.micros);
  return (SHORTEST_WHEELBASE_M * MICROS_PER_SECOND) / shortest;
}

interface PulsePairs {
  pairs: [Pulse, Pulse][];
  /** Whether both sensors saw every axle. */
  complete: boolean;
  /** How many axles there were, as far as the two tell. */
  axles: number;
}

/**
 * Pairs the pulses of two sensors: one to one where their numbers are equal, else by the delay that three quarters of
 * the shorter list share. Equal numbers can hide a different miss on either side; then nearly all others share a delay
 * which one-to-one pairs do not.
 */
export function matchPulses(low: readonly Pulse[], high: readonly Pulse[]): PulsePairs {
  const direct: [Pulse, Pulse][] = low.length === high.length ? low.map((pulse, i) => [pulse, high[i]!]) : [];
  const delays = direct.map(([a, b]) => b.micros - a.micros);
  const oneWay = delays.length > 0 && Math.min(...delays) * Math.max(...delays) > 0;
  const alike = oneWay && Math.max(...delays.map(Math.abs)) < 1.5 * Math.min(...delays.map(Math.abs));
  if (alike) return { pairs: direct, complete: true, axles: direct.length };
  const most = Math.max(low.length, high.length);
  const shared = bestShared(low, high);
  const fewest = Math.min(low.length, high.length);
  const wanted = oneWay ? fewest - Math.max(1, Math.floor(fewest / 16)) : 0.75 * fewest;
  if (shared.length >= Math.max(2, wanted)) return { pairs: shared, complete: false, axles: most };
  if (oneWay) return { pairs: direct, complete: true, axles: direct.length };
  const pairs = withoutLowest(low, high);
  return { pairs, complete: false, axles: pairs.length > 0 ? pairs.length : most };
}

/** A pulse lower than this share of the usual one may be left out for the sake of the others. */
const FALSE_SHARE = 0.4;

/** A standing train can leave false pulses, low ones: one-to-one pairs without them, if they then run one way. */
function withoutLowest(low: readonly Pulse[], high: readonly Pulse[]): [Pulse, Pulse][] {
  const fewest = Math.min(low.length, high.length);
  const surplus = Math.max(low.length, high.length) - fewest;
  if (fewest < 2 || surplus === 0 || surplus > Math.max(2, Math.floor(fewest / 2))) return [];
  const highest = (pulses: readonly Pulse[]): Pulse[] => {
    const byHeight = [...pulses].sort((a, b) => b.height - a.height);
    const kept = new Set(byHeight.slice(0, fewest));
    const usual = median(byHeight.slice(0, fewest).map(({ height }) => height));
    return pulses.filter((pulse) => kept.has(pulse) || pulse.height > FALSE_SHARE * usual);
  };
  const others = highest(high);
  const own = highest(low);
  if (own.length !== others.length) return [];
  const pairs = own.map((pulse, i): [Pulse, Pulse] => [pulse, others[i]!]);
  const delays = pairs.map(([a, b]) => b.micros - a.micros);
  return Math.min(...delays) * Math.max(...delays) > 0 ? pairs : [];
}

function bestShared(low: readonly Pulse[], high: readonly Pulse[]): [Pulse, Pulse][] {
  let best: [Pulse, Pulse][] = [];
  for (const a of low) {
    for (const b of high) {
      if (b.micros === a.micros) continue;
      const pairs = pairsAt(low, high, b.micros - a.micros);
      if (pairs.length > best.length) best = pairs;
    }
  }
  return best;
}

/** A pulse belongs to a shared delay when it lies within this share of it, and within these bounds, µs. */
const DELAY_SHARE = 0.06;
const DELAY_WITHIN = [8_000, 150_000] as const;

function pairsAt(low: readonly Pulse[], high: readonly Pulse[], delay: number): [Pulse, Pulse][] {
  const tolerance = Math.min(DELAY_WITHIN[1], Math.max(DELAY_WITHIN[0], Math.abs(delay) * DELAY_SHARE));
  const pairs: [Pulse, Pulse][] = [];
  let from = 0;
  for (const a of low) {
    for (let j = from; j < high.length; j++) {
      const offBy = high[j]!.micros - a.micros - delay;
      if (offBy > tolerance) break;
      if (offBy < -tolerance) continue;
      pairs.push([a, high[j]!]);
      from = j + 1;
      break;
    }
  }
  return pairs;
}

/** Where each axle runs behind the first: distance by the mean of neighbouring speeds, good for constant speed and gentle braking. */
function placeAxles(pairs: readonly [Pulse, Pulse][], speeds: readonly number[]): Axle[] {
  const heights = pairs.map(([a, b]) => (a.height + b.height) / 2);
  const usual = median(heights);
  const axles: Axle[] = [];
  let behind = 0;
  let before = 0;
  pairs.forEach(([a, b], i) => {
    const micros = Math.round((a.micros + b.micros) / 2);
    if (i > 0) behind += (((speeds[i]! + speeds[i - 1]!) / 2) * (micros - before)) / MICROS_PER_SECOND;
    before = micros;
    axles.push({ micros, behindFirstM: behind, weight: heights[i]! / usual });
  });
  return axles;
}

/** A pulse stands above noise and above this share of the highest; two pulses are parted by a valley below this share of the lesser. */
const HEIGHT_SHARE = 0.2;
const VALLEY_SHARE = 0.7;
const SIGMAS = 8;

/** Crests of the axle pulses in one channel, by a parabola through the top of each. */
export function axlePulses(channel: RecordChannel): Pulse[] {
  const { x } = channel;
  // The quiet part is the base line: a wheel that stands on a gauge can hold it up for most of the record.
  const centre = channel.offset === null ? median(x) : 0;
  // Most of a passage is between axles, and the quiet part may hold the first of a creeping train: the lesser is true.
  const noise = Math.min(channel.noise ?? Infinity, 1.4826 * mad(x));
  const highest = x.reduce((most, value) => Math.max(most, value), 0) - centre;
  const threshold = Math.max(SIGMAS * noise, HEIGHT_SHARE * highest);
  if (highest <= threshold || highest <= 0) return [];
  const crests: number[] = [];
  let valley = 0;
  for (let i = 1; i < x.length - 1; i++) {
    const value = x[i]! - centre;
    valley = Math.min(valley, value);
    if (value < threshold || value < x[i - 1]! - centre || value <= x[i + 1]! - centre) continue;
    const previous = crests.at(-1);
    const parted = previous === undefined || valley < VALLEY_SHARE * Math.min(value, x[previous]! - centre);
    if (parted) crests.push(i);
    else if (value > x[previous]! - centre) crests[crests.length - 1] = i;
    if (parted || crests.at(-1) === i) valley = value;
  }
  return crests.map((crest) => {
    const top = topOf(x, crest, centre);
    return { micros: microsOf(channel, top.index), height: top.height };
  });
}

/** Least-squares parabola through the samples about a crest that are above two thirds of it. */
function topOf(x: Float64Array, crest: number, centre: number): { index: number; height: number } {
  const height = x[crest]! - centre;
  let half = 1;
  const above = (i: number): boolean => i >= 0 && i < x.length && x[i]! - centre > (2 / 3) * height;
  while (above(crest - half - 1) && above(crest + half + 1)) half += 1;
  let s0 = 0;
  let s1 = 0;
  let s2 = 0;
  let s4 = 0;
  let sy = 0;
  let sxy = 0;
  let sxxy = 0;
  for (let k = -half; k <= half; k++) {
    const y = (x[crest + k] ?? centre) - centre;
    s0 += 1;
    s1 += k;
    s2 += k * k;
    s4 += k ** 4;
    sy += y;
    sxy += k * y;
    sxxy += k * k * y;
  }
  const bend = (s0 * sxxy - s2 * sy) / (s0 * s4 - s2 * s2);
  const slope = sxy / s2;
  if (bend >= 0) return { index: crest, height };
  const shift = Math.max(-half, Math.min(half, -slope / (2 * bend)));
  const level = (sy - bend * s2 - slope * s1) / s0;
  return { index: crest + shift, height: level + slope * shift + bend * shift * shift };
}

function longer(a: Place, b: Place): Place {
  return a.pulses.length >= b.pulses.length ? a : b;
}

function mean(values: readonly number[]): number {
  return values.reduce((sum, value) => sum + value, 0) / values.length;
}
