import {
  bridgeLengthM,
  isDeckAcceleration,
  type BridgeDefinition,
  type Sensor,
  type Span,
} from '#core/contract/bridge.ts';
import { spreadWithin } from './balloons.ts';

/** Scales of drawings that a long section may have, 1 : n, largest first. */
const SCALES = [75, 100, 125, 150, 200, 250, 300, 400, 500, 750, 1000, 1500, 2000, 3000, 5000, 10_000, 20_000];
/** CSS pixels per metre of paper: 96 to the inch. */
const PX_PER_M = 96 / 0.0254;
/** Track shown beyond each abutment: at the least, and as a part of the bridge. */
const APPROACH = { wide: { leastM: 12, part: 0.1 }, narrow: { leastM: 3, part: 0.05 } };
/** Narrower than this the drawing leaves out most of the track beyond the bridge, so that all of the bridge is seen. */
export const LEAST_WIDTH = 860;
/** Room for the dimension of a span. */
const DIMENSION_PX = 62;

/** Heights below the running surface, m, as usual for such decks; the definition states none. */
export const LEVEL = {
  rail: 0.165,
  sleeperTop: 0.175,
  sleeperFoot: 0.39,
  ballastTop: 0.18,
  ballastFoot: 0.72,
} as const;

export interface SectionLayout {
  scale: number;
  pxPerM: number;
  width: number;
  /** Height of the drawing with dimension and chainage, and of the picture alone. */
  height: number;
  floor: number;
  /** Position along the bridge to pixels, and height below the running surface to pixels. */
  x: (alongM: number) => number;
  y: (belowM: number) => number;
  fromM: number;
  toM: number;
  lengthM: number;
  spans: SpanLevels[];
  /** Soffit of the deepest span, m. */
  soffitM: number;
  balloonY: number;
  waterY: number;
  dimensionY: number;
  chainageY: number;
  /** Enough room for stones, cross-beams and rollers. */
  fine: boolean;
  /** Little room: what is written beside the drawing is short. */
  narrow: boolean;
}

export interface SpanLevels {
  span: Span;
  /** Underside of what carries the track, upper and lower edge of the girder, m below the running surface. */
  floorM: number;
  topM: number;
  soffitM: number;
}

/** Room for a vehicle above the running surface, m, and over it for the speed, px. */
const UP_M = 4.15;
const SPEED_ROW = 20;
/** Over the rails where no train is to be drawn, px. */
const CLEAR_PX = 12;

/**
 * @param roomPx wider than this is the drawing only where its balloons and dimensions would not stand beside each other
 * @param train whether room is kept for a train
 */
export function layoutSection(
  definition: BridgeDefinition,
  roomPx: number,
  { train = true }: { train?: boolean } = {},
): SectionLayout {
  const lengthM = bridgeLengthM(definition);
  const narrow = roomPx < LEAST_WIDTH;
  const { leastM, part } = APPROACH[narrow ? 'narrow' : 'wide'];
  const needM = lengthM + 2 * Math.max(leastM, lengthM * part);
  const smallest = SCALES.at(-1)!;
  const width = Math.max(
    roomPx,
    (PX_PER_M / smallest) * needM,
    definition.spans.length * DIMENSION_PX + 40,
    definition.sensors.reduce((sum, { id }) => sum + 2 * halfOf(id) + GAP_PX, 0),
  );
  const scale = SCALES.find((n) => (PX_PER_M / n) * needM <= width) ?? smallest;
  const pxPerM = PX_PER_M / scale;
  const fromM = (lengthM - width / pxPerM) / 2;
  const top = train ? Math.max(UP_M * pxPerM, 60) + SPEED_ROW * (narrow ? 2 : 1) : CLEAR_PX;
  const x = (alongM: number): number => (alongM - fromM) * pxPerM;
  const y = (belowM: number): number => top + belowM * pxPerM;
  const spans = definition.spans.map(levelsOf);
  const soffitM = Math.max(...spans.map((span) => span.soffitM));
  const balloonY = y(soffitM) + 30;
  const waterY = balloonY + 24;
  const floor = waterY + 20;
  const chainageY = floor + 36;
  return {
    scale,
    pxPerM,
    width,
    x,
    y,
    fromM,
    toM: fromM + width / pxPerM,
    lengthM,
    spans,
    soffitM,
    balloonY,
    waterY,
    floor,
    dimensionY: floor + 14,
    chainageY,
    height: chainageY + 26,
    fine: pxPerM >= 12,
    narrow,
  };
}

const between = (low: number, value: number, high: number): number => Math.min(high, Math.max(low, value));

/** Heights of a span from its kind and length, by the slenderness usual for the kind. */
function levelsOf(span: Span): SpanLevels {
  const ballasted = span.track === 'ballasted';
  const floorM = ballasted ? LEVEL.ballastFoot : LEVEL.sleeperFoot + 0.02;
  const l = span.lengthM;
  switch (span.structure) {
    case 'steel trough':
      return { span, floorM, topM: 0.06, soffitM: floorM + between(0.55, l / 25, 1.4) };
    case 'steel truss':
      return { span, floorM, topM: floorM + 0.23, soffitM: floorM + 0.23 + between(2.4, l / 10.5, 9) };
    case 'steel box girder':
      return { span, floorM, topM: floorM, soffitM: floorM + between(0.8, l / 18, 5) };
    case 'composite':
      return { span, floorM, topM: floorM, soffitM: floorM + between(0.9, l / 16, 5) };
    case 'prestressed concrete':
      return { span, floorM, topM: floorM, soffitM: floorM + between(0.6, l / 17, 4) };
    case 'reinforced concrete':
    case 'filler beam':
      return { span, floorM, topM: floorM, soffitM: floorM + between(0.5, l / 15, 2) };
    case 'masonry arch':
      return { span, floorM, topM: floorM, soffitM: floorM + 0.55 + between(1, l / 3, 12) };
    case 'steel plate girder':
    case 'other':
      return { span, floorM, topM: ballasted ? 0.55 : floorM, soffitM: floorM + between(0.8, l / 13, 4) };
  }
}

export interface PlacedSensor {
  sensor: Sensor;
  /** Where it sits, px, and how it is drawn. */
  x: number;
  y: number;
  mark: 'block' | 'rail' | 'dot';
  /** Centre of its balloon and half its width, px. */
  balloonX: number;
  half: number;
}

const CHARACTER_PX = 5.6;
/** Between one balloon and the next. */
const GAP_PX = 3;
const halfOf = (id: string): number => Math.max(10.5, (id.length * CHARACTER_PX + 10) / 2);

/** Sensors at their true place with balloons in one row that never overlap, in the order along the bridge. */
export function placeSensors(definition: BridgeDefinition, layout: SectionLayout): PlacedSensor[] {
  const sensors = definition.sensors.toSorted((a, b) => a.alongM - b.alongM);
  const halves = sensors.map(({ id }) => halfOf(id));
  const places = spreadWithin(
    sensors.map((sensor, i) => ({ at: layout.x(sensor.alongM), half: halves[i]! + GAP_PX / 2 })),
    layout.width,
  );
  return sensors.map((sensor, i) => ({
    sensor,
    x: layout.x(sensor.alongM),
    y: layout.y(depthOf(sensor, layout)),
    mark: sensor.mount === 'rail' ? 'rail' : isDeckAcceleration(sensor) ? 'block' : 'dot',
    balloonX: places[i]!,
    half: halves[i]!,
  }));
}

function depthOf(sensor: Sensor, layout: SectionLayout): number {
  const span = layout.spans.reduce((best, each) => (outside(each, sensor) < outside(best, sensor) ? each : best));
  switch (sensor.mount) {
    case 'rail':
      return LEVEL.rail;
    case 'ballast':
      return 0.55;
    case 'bearing':
      return span.soffitM + 0.2;
    case 'air':
      return span.soffitM + 0.3;
    case 'deck':
      return span.span.structure === 'steel truss' ? span.topM + 0.08 : span.soffitM + 0.06;
    case 'girder':
      return sensor.quantity === 'temperature' ? (span.floorM + span.soffitM) / 2 : span.soffitM + 0.06;
  }
}

const outside = ({ span }: SpanLevels, sensor: Sensor): number =>
  Math.max(span.startM - sensor.alongM, sensor.alongM - span.startM - span.lengthM, 0);
