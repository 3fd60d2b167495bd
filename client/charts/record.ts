import {
  bridgeLengthM,
  countsAxles,
  isDeckAcceleration,
  type BridgeDefinition,
  type Sensor,
} from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { Micros } from '#core/contract/time.ts';
import { linear, type Scale } from './scale.ts';
import { layoutSection, LEAST_WIDTH, type SectionLayout } from './section-layout.ts';
import type { Wave } from './wave.ts';

/** Geometry of a record section: position along the bridge to the right, time downwards. */
export interface RecordLayout {
  width: number;
  /** Of the field of traces, without the section above it. */
  height: number;
  /** The bridge above the field, to the same scale and axis, and how high it stands. */
  section: SectionLayout;
  head: number;
  /** Metres along the bridge at the left and right edge. */
  fromM: number;
  toM: number;
  pixelsPerMetre: number;
  /** Left end of the ruled area; the time axis stands there. */
  left: number;
  x: Scale;
  /** Seconds after the first axle reaches the bridge → pixel. */
  y: Scale;
}

const LEFT_WIDE = 92;
const RIGHT_WIDE = 148;
const GREATEST_PX_PER_M = 36;

export function layoutRecord(
  bridge: BridgeDefinition,
  width: number,
  height: number,
  seconds: { from: number; to: number },
): RecordLayout {
  const length = bridgeLengthM(bridge);
  const narrow = width < 560;
  // On wide screens the drawing keeps a readable scale and shows more of the approaches instead.
  const spare = narrow ? 0 : Math.max(0, width - LEFT_WIDE - RIGHT_WIDE - length * GREATEST_PX_PER_M);
  const before = narrow ? 48 : LEFT_WIDE + spare / 2;
  const after = narrow ? 30 : RIGHT_WIDE + spare / 2;
  const pixelsPerMetre = Math.max(1, width - before - after) / length;
  const fromM = -before / pixelsPerMetre;
  const toM = length + after / pixelsPerMetre;
  const x = linear(fromM, toM, 0, width);
  const section = sectionAbove(bridge, { width, pixelsPerMetre, fromM, toM, x });
  return {
    width,
    height,
    section,
    head: section.height,
    fromM,
    toM,
    pixelsPerMetre,
    left: narrow ? 30 : 44,
    x,
    y: linear(seconds.from, seconds.to, 0, height),
  };
}

/** Room above the rail for wheels, and below the soffit for balloons, px. */
const LEAST_WHEEL_ROOM = 16;
const BALLOON_DROP = 27;

/** The long section at the record's own scale, without water, dimension and chainage. */
function sectionAbove(
  bridge: BridgeDefinition,
  {
    width,
    pixelsPerMetre: pxPerM,
    fromM,
    toM,
    x,
  }: Pick<RecordLayout, 'width' | 'pixelsPerMetre' | 'fromM' | 'toM' | 'x'>,
): SectionLayout {
  const usual = layoutSection(bridge, LEAST_WIDTH);
  const top = Math.max(LEAST_WHEEL_ROOM, 1.15 * pxPerM);
  const y = (belowM: number): number => top + belowM * pxPerM;
  const balloonY = y(usual.soffitM) + Math.max(BALLOON_DROP, 0.6 * pxPerM + 12);
  return {
    ...usual,
    pxPerM,
    width,
    x,
    y,
    fromM,
    toM,
    balloonY,
    floor: balloonY + 2,
    height: balloonY + 16,
    fine: pxPerM >= 12,
  };
}

/**
 * The sensors that get a trace. Of several at one place along the bridge only one can be drawn: the chosen one, else
 * the one that shook most.
 */
export function drawnSensors(
  bridge: BridgeDefinition,
  passage: Passage,
  chosen: string | null,
): { drawn: Sensor[]; behind: { sensor: Sensor; front: Sensor }[] } {
  const peaks = new Map(passage.channels.map((channel) => [channel.sensor, channel.bandPeak.value ?? 0]));
  const rank = (sensor: Sensor): number => (sensor.id === chosen ? Infinity : (peaks.get(sensor.id) ?? 0));
  const able = bridge.sensors
    .filter((sensor) => (isDeckAcceleration(sensor) || countsAxles(sensor)) && peaks.has(sensor.id))
    .sort((a, b) => rank(b) - rank(a));
  const drawn: Sensor[] = [];
  const behind: { sensor: Sensor; front: Sensor }[] = [];
  for (const sensor of able) {
    const front = drawn.find((other) => Math.abs(other.alongM - sensor.alongM) < 0.3);
    if (front) behind.push({ sensor, front });
    else drawn.push(sensor);
  }
  drawn.sort((a, b) => a.alongM - b.alongM);
  return { drawn, behind };
}

/** Pixels per m/s², so that neighbouring traces nearly touch at the greatest peak; and the same for axle sensors. */
export function traceScales(
  layout: RecordLayout,
  drawn: readonly Sensor[],
  waves: ReadonlyMap<string, Wave>,
): { acceleration: number; axles: Map<string, number> } {
  const deck = drawn.filter(isDeckAcceleration);
  const gaps = deck.slice(1).map((sensor, i) => sensor.alongM - deck[i]!.alongM);
  const gap = Math.min(110, (gaps.length > 0 ? Math.min(...gaps) : 6) * layout.pixelsPerMetre);
  const peak = Math.max(0.1, ...deck.map((sensor) => greatest(waves.get(sensor.id))));
  const axles = new Map(
    drawn
      .filter((sensor) => !isDeckAcceleration(sensor))
      .map((sensor) => [sensor.id, Math.min(22, gap * 0.4) / Math.max(1e-9, greatest(waves.get(sensor.id)))]),
  );
  return { acceleration: (gap * 0.52) / peak, axles };
}

function greatest(wave: Wave | undefined): number {
  let most = 0;
  for (const value of wave?.samples ?? []) if (Math.abs(value) > most) most = Math.abs(value);
  return most;
}

export interface AxleLine {
  /** Seconds after the first axle reaches the bridge, at the left and right edge. */
  atLeft: number;
  atRight: number;
  heavy: boolean;
}

/** The path of each axle through position and time, from its measured time and the speed; none without a speed. */
export function axleLines(bridge: BridgeDefinition, passage: Passage, fromM: number, toM: number): AxleLine[] {
  const speed = signedSpeed(passage);
  if (speed === null) return [];
  const base = axleBaseM(bridge);
  const weights = passage.axles.map((axle) => axle.weight).toSorted((a, b) => a - b);
  const median = weights[weights.length >> 1] ?? 1;
  const at = (micros: Micros, alongM: number): number =>
    (micros - passage.phases.onMicros) / 1e6 + (alongM - base) / speed;
  return passage.axles.map((axle) => ({
    atLeft: at(axle.micros, fromM),
    atRight: at(axle.micros, toM),
    heavy: axle.weight > 1.25 * median,
  }));
}

/** Wheels of a bogie stand closer than this. */
const BOGIE_M = 3.4;

/** Where the axles stand at a time, metres along the bridge, and which two neighbours share a bogie. */
export function axlesAt(
  bridge: BridgeDefinition,
  passage: Passage,
  micros: Micros,
): { at: number[]; bogies: [number, number][] } {
  const at = axlePositions(bridge, passage, micros);
  const bogies: [number, number][] = [];
  for (let i = 1; i < at.length; i++) {
    if (Math.abs(at[i]! - at[i - 1]!) < BOGIE_M) bogies.push([at[i - 1]!, at[i]!]);
  }
  return { at, bogies };
}

function axlePositions(bridge: BridgeDefinition, passage: Passage, micros: Micros): number[] {
  const speed = signedSpeed(passage);
  if (speed === null) return [];
  const base = axleBaseM(bridge);
  return passage.axles.map((axle) => base + (speed * (micros - axle.micros)) / 1e6);
}

/** Positive towards rising chainage; null where speed or direction are not measurable. */
function signedSpeed({ speedMs, direction }: Passage): number | null {
  if (speedMs.value === null || speedMs.value === 0 || direction === null) return null;
  return direction === 'rising' ? speedMs.value : -speedMs.value;
}

/** Middle of the axle sensors' base, where an axle's time is taken. */
function axleBaseM(bridge: BridgeDefinition): number {
  const along = bridge.sensors.filter(countsAxles).map((sensor) => sensor.alongM);
  return along.length > 0 ? (Math.min(...along) + Math.max(...along)) / 2 : bridgeLengthM(bridge) / 2;
}
