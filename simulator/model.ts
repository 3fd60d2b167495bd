import { bridgeLengthM, spanAt, type BridgeDefinition, type Sensor, type Span } from '#core/contract/bridge.ts';
import type { Micros } from '#core/contract/time.ts';
import { lowerBoundDampingPercent, naturalFrequencyBounds } from '#core/mechanics/eurocode.ts';
import type { AmplitudeLaw } from '#core/mechanics/modal-step.ts';
import { climateFactors, conditionFactors, createWeather, type Weather } from './climate.ts';
import { continuousShapes, sineShape, type Shape } from './shapes.ts';
import type { BridgeParameters } from './parameters.ts';

/**
 * The bridge as a set of modes. Displacement and acceleration are positive downwards; a bending coordinate is the
 * motion at the antinode of its shape, a torsion coordinate that of a point one metre to the right of the deck's axis.
 */
export interface BridgeModel {
  lengthM: number;
  modes: readonly ModelMode[];
  /** Distance of each track's centre from the deck's axis, m, from left to right. */
  tracksM: readonly number[];
  weather: Weather;
  /** Frequency and damping of a mode at a moment, by temperature and condition. */
  lawAt(mode: ModelMode, micros: Micros): AmplitudeLaw;
}

export interface ModelMode {
  kind: 'bending' | 'torsion';
  /** Span it belongs to; the first for a continuous girder. */
  span: Span;
  shape: Shape;
  /** Modal mass, kg; for torsion the modal moment of inertia over 1 m². */
  massKg: number;
  /** Undamped frequency and damping ratio at the reference amplitude, 10 °C, as defined. */
  frequencyHz: number;
  zeta: number;
  /** From coordinate to the amplitude that the amplitude law speaks of. */
  amplitudePerUnit: number;
}

/** The amplitude at which the definition's frequency and damping are taken to hold, m/s². */
export const REFERENCE_AMPLITUDE_MS2 = 0.3;

/** Where the definition is silent: mass with ballast, and on a direct fastened track, kg/m. */
const USUAL_MASS = { ballasted: 9000, 'direct fastened': 4500 } as const;
/** And the first torsion mode over the first bending mode. */
const USUAL_TORSION = 1.72;

export function createModel(definition: BridgeDefinition, parameters: BridgeParameters, seed: number): BridgeModel {
  const weather = createWeather(parameters.climate, seed);
  const modes = parameters.structure.continuous
    ? continuousModes(definition, parameters)
    : definition.spans.flatMap((span) => spanModes(span, parameters));
  const { softening, dampingRise } = parameters.ballast;
  return {
    lengthM: bridgeLengthM(definition),
    modes,
    tracksM: tracks(definition, parameters),
    weather,
    lawAt: (mode, micros) => {
      const climate = climateFactors(parameters.climate, weather, micros);
      const condition = conditionFactors(parameters.condition, mode.span.id, micros);
      const dependence = climate.amplitudeDependence * condition.amplitudeDependence;
      const scale = mode.amplitudePerUnit * dependence;
      const damped = mode.frequencyHz * Math.sqrt(1 - mode.zeta ** 2);
      const f0Hz = (damped / (1 - softening * REFERENCE_AMPLITUDE_MS2)) * climate.frequency * condition.frequency;
      const z0 = mode.zeta - dampingRise * REFERENCE_AMPLITUDE_MS2;
      return {
        f0Hz,
        fallHz: f0Hz * softening * scale,
        z0: Math.max(0, z0) * climate.damping * condition.damping,
        rise: dampingRise * scale,
      };
    },
  };
}

/** Undamped frequency and damping ratio that an amplitude law has at an amplitude, m/s². */
export function poleAt(law: AmplitudeLaw, amplitudeMs2: number): { frequencyHz: number; zeta: number } {
  const decay = (law.z0 + law.rise * amplitudeMs2) * law.f0Hz;
  const damped = law.f0Hz - law.fallHz * amplitudeMs2;
  const frequencyHz = Math.hypot(decay, damped);
  return { frequencyHz, zeta: decay / frequencyHz };
}

/** What a sensor feels of a mode: factors on its acceleration or displacement, in the sensor's SI unit. */
export function sensorFactor(sensor: Sensor, mode: ModelMode): number {
  const { shape } = mode;
  const inside = sensor.alongM >= shape.startM && sensor.alongM <= shape.startM + shape.lengthM;
  if (!inside) return 0;
  const lever = leverOf(sensor, mode);
  switch (sensor.quantity) {
    case 'acceleration':
      return lever * shape.at(sensor.alongM);
    case 'displacement':
      return 1000 * lever * shape.at(sensor.alongM);
    case 'strain':
      // sagging stretches the lower flange; µm/m
      return sensor.countsAxles === true || mode.kind === 'torsion'
        ? 0
        : -1e6 * FLANGE_M * shape.curvatureAt(sensor.alongM);
    default:
      return 0;
  }
}

/** Distance of the lower flange from the neutral axis. */
const FLANGE_M = 0.55;
/** Height of the deck above its centre of twist, by which torsion is felt sideways. */
const TWIST_HEIGHT_M = 0.8;

function leverOf(sensor: Sensor, mode: ModelMode): number {
  const direction = sensor.direction ?? 'vertical';
  if (direction === 'vertical') return mode.kind === 'bending' ? 1 : (sensor.acrossM ?? 0);
  if (direction === 'lateral') return mode.kind === 'bending' ? 0 : TWIST_HEIGHT_M;
  return 0;
}

/** Index of the track a rail sensor sits on: the nearest; the first of two equally near. */
export function trackOf(sensor: Sensor, model: BridgeModel): number {
  const distance = model.tracksM.map((track) => Math.abs(track - (sensor.acrossM ?? 0)));
  return distance.indexOf(Math.min(...distance));
}

function tracks(definition: BridgeDefinition, { structure }: BridgeParameters): number[] {
  const count = Math.max(1, ...definition.spans.map((span) => span.tracks ?? 1));
  if (count === 1) return [structure.eccentricityM];
  return Array.from({ length: count }, (_, i) => (i - (count - 1) / 2) * structure.trackSpacingM);
}

function spanModes(span: Span, parameters: BridgeParameters): ModelMode[] {
  const { bendingModes, torsionModes } = parameters.structure;
  const place = { startM: span.startM, lengthM: span.lengthM };
  const first = firstFrequencyHz(span);
  const bending = Array.from({ length: bendingModes }, (_, i) =>
    bendingMode(span, sineShape({ ...place, order: i + 1 }), bendingHz(span, first, i + 1), parameters),
  );
  const torsion = Array.from({ length: torsionModes }, (_, i) =>
    torsionMode(span, sineShape({ ...place, order: i + 1 }), (i + 1) * torsionHz(span, first), parameters),
  );
  return [...bending, ...torsion];
}

/** One girder over all supports: uniform, with the mass and f1 of the first span's definition. */
function continuousModes(definition: BridgeDefinition, parameters: BridgeParameters): ModelMode[] {
  const span = definition.spans[0]!;
  const first = firstFrequencyHz(span);
  const { bendingModes, torsionModes } = parameters.structure;
  const shapes = continuousShapes(
    definition.spans.map((each) => each.lengthM),
    definition.spans[0]!.startM,
    bendingModes * definition.spans.length,
  );
  const lowest = shapes[0]!.frequencyRatio;
  return [
    ...shapes.map(({ shape, frequencyRatio }) =>
      bendingMode(span, shape, (first * frequencyRatio) / lowest, parameters),
    ),
    // twist is held at each support, so torsion stays within its span
    ...definition.spans.flatMap((each) => spanModes(each, parameters).slice(bendingModes, bendingModes + torsionModes)),
  ];
}

function bendingMode(span: Span, shape: Shape, frequencyHz: number, parameters: BridgeParameters): ModelMode {
  return {
    kind: 'bending',
    span,
    shape,
    massKg: massPerMetreKg(span) * shape.squareIntegralM,
    frequencyHz,
    zeta: zetaOf(span, frequencyHz, parameters),
    amplitudePerUnit: 1,
  };
}

function torsionMode(span: Span, shape: Shape, frequencyHz: number, parameters: BridgeParameters): ModelMode {
  const { gyrationM } = parameters.structure;
  return {
    kind: 'torsion',
    span,
    shape,
    massKg: massPerMetreKg(span) * gyrationM ** 2 * shape.squareIntegralM,
    frequencyHz,
    zeta: zetaOf(span, frequencyHz, parameters),
    amplitudePerUnit: gyrationM,
  };
}

function massPerMetreKg(span: Span): number {
  return span.massPerMetreKg ?? USUAL_MASS[span.track];
}

/** f1 as defined, else the middle of the usual range (EN 1991-2 Figure 6.10) on a logarithmic scale. */
function firstFrequencyHz(span: Span): number {
  const defined = span.frequenciesHz?.f1;
  if (defined !== undefined) return defined;
  const bounds = naturalFrequencyBounds(Math.max(4, Math.min(100, span.lengthM)));
  return bounds === null ? 5 : Math.sqrt(bounds.lowerHz * bounds.upperHz);
}

/** n² f1, unless the definition gives a second or third frequency that can only be that bending mode. */
function bendingHz(span: Span, first: number, order: number): number {
  const { f2, f3, torsion } = span.frequenciesHz ?? {};
  if (order === 2 && f2 !== undefined && f2 > 2.5 * first && f2 !== torsion) return f2;
  if (order === 3 && f3 !== undefined && f3 > 5 * first && f3 !== torsion) return f3;
  return order ** 2 * first;
}

function torsionHz(span: Span, first: number): number {
  return span.frequenciesHz?.torsion ?? USUAL_TORSION * first;
}

/** As defined, else the lower bound of EN 1991-2 Table 6.6, else 1 %; growing with frequency. */
function zetaOf(span: Span, frequencyHz: number, parameters: BridgeParameters): number {
  const percent = span.dampingPercent ?? lowerBoundDampingPercent(span.structure, span.lengthM) ?? 1;
  return (percent / 100) * (frequencyHz / firstFrequencyHz(span)) ** parameters.structure.dampingGrowth;
}

/** Whether a mode moves the span a sensor is on. */
export function feels(definition: BridgeDefinition, sensor: Sensor, mode: ModelMode): boolean {
  return mode.shape.lengthM > mode.span.lengthM || spanAt(definition, sensor.alongM) === mode.span;
}
