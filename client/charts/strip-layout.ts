import { countsAxles, isDeckAcceleration, spanAt, type BridgeDefinition, type Sensor } from '#core/contract/bridge.ts';
import { SI_UNIT } from '#core/contract/units.ts';
import { limitLines, type LimitLine } from './limit-line.ts';

/** One channel of the strips. */
export interface Lane {
  sensor: Sensor;
  kind: 'acceleration' | 'axles' | 'other';
  unit: string;
  /** Where along its span it sits, in words. */
  place: string;
  limits: LimitLine[];
  /** Of the drawing, px. */
  top: number;
  height: number;
}

const GAP = 8;
const AXLES_HEIGHT = 46;

/** Channels that are shown before the reader has chosen: up to four of the deck, nearest the middle of spans, and one axle gauge. */
export function usualChannels(definition: BridgeDefinition): string[] {
  const deck = definition.sensors.filter(isDeckAcceleration);
  const away = (sensor: Sensor): number => {
    const span = spanAt(definition, sensor.alongM);
    return Math.abs(sensor.alongM - span.startM - span.lengthM / 2) / span.lengthM;
  };
  const chosen = new Set(deck.toSorted((a, b) => away(a) - away(b)).slice(0, 4));
  const gauge = definition.sensors.find(countsAxles);
  if (gauge) chosen.add(gauge);
  return definition.sensors.filter((sensor) => chosen.has(sensor)).map(({ id }) => id);
}

/** Sensors that may be shown as strips: those fast enough for a trace. */
export function stripSensors(definition: BridgeDefinition): Sensor[] {
  return definition.sensors.filter(({ quantity, rateHz }) => quantity !== 'temperature' && rateHz >= 5);
}

/** Lanes from top to bottom: accelerations first, gauges that count axles last. */
export function lanesOf(
  definition: BridgeDefinition,
  channels: readonly string[],
  narrow = false,
): { lanes: Lane[]; height: number } {
  const sensors = stripSensors(definition).filter(({ id }) => channels.includes(id));
  const order = (sensor: Sensor): number => (isDeckAcceleration(sensor) ? 0 : countsAxles(sensor) ? 2 : 1);
  const sorted = sensors.toSorted((a, b) => order(a) - order(b));
  const traces = sorted.filter((sensor) => order(sensor) < 2).length;
  const traceHeight = traces <= 4 ? (narrow ? 78 : 110) : traces <= 6 ? 70 : traces <= 10 ? 50 : 40;
  let top = 4;
  const lanes = sorted.map((sensor) => {
    const kind = order(sensor) === 0 ? 'acceleration' : order(sensor) === 2 ? 'axles' : 'other';
    const height = kind === 'axles' ? AXLES_HEIGHT : traceHeight;
    const lane: Lane = {
      sensor,
      kind,
      unit: SI_UNIT[sensor.quantity] === '1' ? '' : SI_UNIT[sensor.quantity],
      place: placeOf(definition, sensor),
      limits: kind === 'acceleration' ? limitsOf(definition, sensor) : [],
      top,
      height,
    };
    top += height + GAP;
    return lane;
  });
  return { lanes, height: top - GAP };
}

/** The levels that hold at a sensor: those of the first limit on the span it lies on. */
export function limitsOf(definition: BridgeDefinition, sensor: Sensor): LimitLine[] {
  const span = spanAt(definition, sensor.alongM);
  const limit = definition.limits.find(({ spans }) => !spans || spans.includes(span.id));
  return limitLines(limit?.levels);
}

/** `L/2 left`: fraction of the span, and side of the deck. */
export function placeOf(definition: BridgeDefinition, sensor: Sensor): string {
  if (sensor.mount === 'rail') return 'rail';
  const span = spanAt(definition, sensor.alongM);
  const part = (sensor.alongM - span.startM) / span.lengthM;
  const side = sensor.acrossM === undefined || sensor.acrossM === 0 ? '' : sensor.acrossM < 0 ? ' left' : ' right';
  const name = NAMED.find(([value]) => Math.abs(part - value) < 0.006)?.[1] ?? `${part.toFixed(2)} L`;
  return `${name}${side}`;
}

const NAMED: readonly (readonly [number, string])[] = [
  [0, 'bearing'],
  [1 / 6, 'L/6'],
  [1 / 5, 'L/5'],
  [1 / 4, 'L/4'],
  [1 / 3, 'L/3'],
  [2 / 5, '2L/5'],
  [1 / 2, 'L/2'],
  [3 / 5, '3L/5'],
  [2 / 3, '2L/3'],
  [3 / 4, '3L/4'],
  [4 / 5, '4L/5'],
  [5 / 6, '5L/6'],
  [1, 'bearing'],
];
