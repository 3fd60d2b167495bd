import type { BridgeDefinition, Sensor, Span, Structure } from '#core/contract/bridge.ts';
import { bridgeLengthM } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { lowerBoundDampingPercent, naturalFrequencyBounds } from '#core/mechanics/eurocode.ts';
import type { SceneEvent } from './nuisance.ts';
import { bridgeParameters, type SensorParameters } from './parameters.ts';
import { offMicros, type PassageEvent } from './passage.ts';
import { RandomStream } from './random.ts';
import type { Scene } from './scene.ts';
import { createTrain, trainLengthM, type TrainType } from './train.ts';

/**
 * Many short scenes on many bridges, to find passages that a monitor misses or invents.
 *
 * What can be decided from the samples bounds what is asked. With an axle gauge at each end, trains may stop and crawl.
 * Accelerometers alone hear a train only while its wheels roll: a stop there is silence, the same as an empty bridge,
 * so on such bridges trains do not stop and run at 15 m/s or more, and one follows another after 2.5 s or later.
 * Trains that are on the bridge at once are one occupation (see truth.ts); no monitor can part them in general.
 */
export interface CampaignScene extends Scene {
  /** For a person who looks for the scene that failed. */
  label: string;
  gauges: boolean;
}

const FIRST_MICROS: Micros = Date.UTC(2026, 2, 1) * 1000;
const SPACING_MICROS = 3 * 3600 * MICROS_PER_SECOND;
/** Quiet time before the first and after the last train, s. */
const BEFORE_S = 14;
const AFTER_S = 12;

/**
 * Scenes until at least `passages` trains have crossed. The same seed gives the same scenes.
 *
 * @param passages how many trains at least
 */
export function* campaign(passages: number, seed: number): Generator<CampaignScene, void> {
  let crossed = 0;
  for (let index = 0; crossed < passages; index++) {
    const scene = campaignScene(index, seed);
    crossed += scene.events.filter((event) => event.kind === 'passage').length;
    yield scene;
  }
}

/** One scene of the campaign by its number. */
export function campaignScene(index: number, seed: number): CampaignScene {
  const random = new RandomStream(seed, `campaign/${index}`);
  const gauges = random.chance(0.7);
  const definition = bridge(`campaign-${index}`, gauges, random);
  const fromMicros = FIRST_MICROS + index * SPACING_MICROS;
  const trains = traffic(definition, gauges, fromMicros + BEFORE_S * MICROS_PER_SECOND, random);
  const lengthM = bridgeLengthM(definition);
  const lastOff = Math.max(
    ...trains.map((train) => offMicros(train, lengthM)),
    fromMicros + (BEFORE_S + random.uniform(10, 40)) * MICROS_PER_SECOND,
  );
  const toMicros = lastOff + AFTER_S * MICROS_PER_SECOND;
  const nuisances = disturb(definition, trains, { fromMicros, toMicros }, random);
  return {
    label: [
      `scene ${index}`,
      gauges ? 'gauges' : 'accelerometers only',
      ...trains.map(describeTrain),
      ...nuisances.map(({ kind }) => kind),
    ].join(', '),
    gauges,
    definition,
    parameters: bridgeParameters(definition, {
      sensors: sensorParameters(definition, random),
      structure: { eccentricityM: random.uniform(-0.15, 0.15), gyrationM: random.uniform(1.2, 1.6) },
      climate: { meanC: random.uniform(-6, 24) },
      ballast: { softening: random.uniform(0.001, 0.008), dampingRise: random.uniform(0.001, 0.005) },
    }),
    seed: seed + index,
    fromMicros,
    toMicros,
    events: [...trains, ...nuisances],
  };
}

function describeTrain({ train, speedMs, stop }: PassageEvent): string {
  return `${train.name} at ${speedMs.toFixed(1)} m/s${stop === undefined ? '' : ' with a stop'}`;
}

const STRUCTURES: readonly Structure[] = [
  'steel trough',
  'steel plate girder',
  'steel truss',
  'composite',
  'prestressed concrete',
  'filler beam',
];
const RATES_HZ = [200, 250, 256, 400, 500, 500, 512, 1000] as const;

function bridge(id: string, gauges: boolean, random: RandomStream): BridgeDefinition {
  const structure = random.pick(STRUCTURES);
  const count = random.pick([1, 1, 1, 1, 2, 2, 3]);
  const lengthM = Math.round(random.uniform(10, count === 1 ? 40 : 28) * 10) / 10;
  const tracks = random.chance(0.3) ? 2 : 1;
  const bounds = naturalFrequencyBounds(lengthM)!;
  const f1 = clamp(bounds.lowerHz * (bounds.upperHz / bounds.lowerHz) ** random.uniform(0.1, 0.8), 3, 12);
  const floor = lowerBoundDampingPercent(structure, lengthM) ?? 1;
  const span = {
    lengthM,
    structure,
    track: random.chance(0.85) ? ('ballasted' as const) : ('direct fastened' as const),
    tracks,
    massPerMetreKg: Math.round(tracks * random.uniform(7500, 12_000) * (structure.startsWith('steel') ? 1 : 1.5)),
    frequenciesHz: { f1, torsion: f1 * random.uniform(1.4, 2) },
    dampingPercent: floor * random.uniform(1, 1.8),
  };
  const spans: Span[] = Array.from({ length: count }, (_, i) => ({
    id: `span-${i + 1}`,
    startM: i * lengthM,
    ...span,
  }));
  const rateHz = random.pick(RATES_HZ);
  return {
    spanbeat: 1,
    id,
    name: `Campaign bridge ${id.slice('campaign-'.length)}`,
    line: { name: 'Campaign' },
    chainageKm: 10,
    spans,
    loggers: [{ id: 'logger-1' }],
    sensors: [
      ...accelerometers(spans, rateHz, tracks),
      ...(gauges ? railGauges(spans, random.chance(0.2) && rateHz <= 500 ? 2 * rateHz : rateHz, tracks) : []),
      { id: 'T1', quantity: 'temperature', logger: 'logger-1', mount: 'deck', alongM: 1, unit: 'Cel', rateHz: 20 },
    ],
    limits: [
      {
        id: 'deck',
        quantity: 'peak deck acceleration',
        levels: { AL: 2.2, IL: 2.8, IAL: 3.5 },
        band: 'EN 1990 A2',
        source: 'campaign',
      },
    ],
  };
}

/** Two at mid span, one at each quarter; on the outer spans of a long bridge two. */
function accelerometers(spans: readonly Span[], rateHz: number, tracks: number): Sensor[] {
  const half = tracks === 2 ? 3.4 : 1.7;
  const places = spans.length === 1 ? [0.25, 0.5, 0.5, 0.75] : [0.5, 0.5, 0.25];
  return spans.flatMap((span, s) =>
    places.map((share, i) => ({
      id: `A${s * places.length + i + 1}`,
      quantity: 'acceleration' as const,
      logger: 'logger-1',
      mount: 'deck' as const,
      direction: 'vertical' as const,
      alongM: span.startM + share * span.lengthM,
      acrossM: i % 2 === 0 ? -half : half,
      unit: 'm/s2',
      range: [-60, 60],
      rateHz,
    })),
  );
}

/** One pair of rail gauges a track, right behind the first and before the last bearing. */
function railGauges(spans: readonly Span[], rateHz: number, tracks: number): Sensor[] {
  const lengthM = bridgeLengthM({ spans: [...spans] });
  const across = tracks === 2 ? [-2, 2] : [0];
  return across.flatMap((acrossM, track) =>
    [0.4, lengthM - 0.4].map((alongM, i) => ({
      id: `S${2 * track + i + 1}`,
      quantity: 'strain' as const,
      logger: 'logger-1',
      mount: 'rail' as const,
      alongM,
      acrossM,
      unit: 'um/m',
      range: [-2000, 2000],
      rateHz,
      countsAxles: true,
    })),
  );
}

function sensorParameters(definition: BridgeDefinition, random: RandomStream): Record<string, SensorParameters> {
  return Object.fromEntries(
    definition.sensors.map((sensor): [string, SensorParameters] => {
      if (sensor.quantity === 'acceleration') {
        return [sensor.id, { noiseRms: random.uniform(0.002, 0.008), offset: random.uniform(-0.1, 0.1), drift: 0.01 }];
      }
      if (sensor.quantity === 'strain') {
        return [sensor.id, { noiseRms: random.uniform(0.5, 2), offset: random.uniform(-40, 40), drift: 5 }];
      }
      return [sensor.id, {}];
    }),
  );
}

/** Share in the traffic, and speeds, m/s. */
const KINDS: readonly { type: TrainType; share: number; speeds: readonly [number, number] }[] = [
  { type: 'regional multiple unit', share: 0.35, speeds: [12, 44] },
  { type: 'intercity', share: 0.25, speeds: [22, 50] },
  { type: 'block freight', share: 0.2, speeds: [9, 28] },
  { type: 'light engine', share: 0.12, speeds: [8, 36] },
  { type: 'tamping machine', share: 0.08, speeds: [6, 20] },
];
const SLOWEST_WITHOUT_GAUGES_MS = 15;

function traffic(
  definition: BridgeDefinition,
  gauges: boolean,
  onMicros: Micros,
  random: RandomStream,
): PassageEvent[] {
  // some scenes have no train at all: nothing may be found there
  if (random.chance(0.06)) return [];
  const first = passage(gauges, onMicros, random);
  const lengthM = bridgeLengthM(definition);
  const tracks = definition.spans[0]?.tracks ?? 1;
  if (tracks === 2) {
    first.track = random.integer(0, 1);
    if (random.chance(0.5)) return [first, meeting(first, lengthM, gauges, random)];
  }
  if (gauges && random.chance(0.1)) return [stopping(first, lengthM, random)];
  if (random.chance(0.12)) return [first, following(first, lengthM, gauges, random)];
  return [first];
}

function passage(gauges: boolean, onMicros: Micros, random: RandomStream): PassageEvent {
  const kind = pickKind(random);
  const lowest = gauges ? kind.speeds[0] : Math.max(kind.speeds[0], SLOWEST_WITHOUT_GAUGES_MS);
  const event: PassageEvent = {
    kind: 'passage',
    train: createTrain(kind.type, random.integer(0, 1e6)),
    onMicros: onMicros + random.integer(0, MICROS_PER_SECOND),
    speedMs: random.uniform(lowest, kind.speeds[1]),
    direction: random.chance(0.5) ? 'rising' : 'falling',
  };
  if (random.chance(0.25)) event.accelerationMs2 = random.uniform(-0.15, 0.25);
  return event;
}

function pickKind(random: RandomStream): (typeof KINDS)[number] {
  let left = random.uniform();
  for (const kind of KINDS) {
    left -= kind.share;
    if (left < 0) return kind;
  }
  return KINDS[0]!;
}

/** The other way, on the other track, while the first is on the bridge. */
function meeting(first: PassageEvent, lengthM: number, gauges: boolean, random: RandomStream): PassageEvent {
  const spent = offMicros(first, lengthM) - first.onMicros;
  const other = passage(gauges, 0, random);
  return {
    ...other,
    onMicros: first.onMicros + Math.round(random.uniform(0, 0.9) * spent),
    track: 1 - (first.track ?? 0),
    direction: first.direction === 'rising' ? 'falling' : 'rising',
  };
}

/** On the same track, into the free decay of the first. */
function following(first: PassageEvent, lengthM: number, gauges: boolean, random: RandomStream): PassageEvent {
  const other = passage(gauges, 0, random);
  const gapS = random.uniform(gauges ? 1.5 : 2.5, 6);
  return {
    ...other,
    onMicros: offMicros(first, lengthM) + Math.round(gapS * MICROS_PER_SECOND),
    direction: first.direction,
    ...(first.track === undefined ? {} : { track: first.track }),
  };
}

function stopping(first: PassageEvent, lengthM: number, random: RandomStream): PassageEvent {
  const { train, onMicros, direction, track } = first;
  const brakingMs2 = random.uniform(0.5, 0.9);
  const afterM = random.uniform(0.4 * lengthM, lengthM + 0.7 * trainLengthM(train));
  return {
    kind: 'passage',
    train,
    onMicros,
    direction,
    ...(track === undefined ? {} : { track }),
    // braking begins on the bridge or while the train is on it: the speed of arrival is that of the passage
    speedMs: Math.min(random.uniform(8, 16), Math.sqrt(2 * brakingMs2 * 0.9 * afterM)),
    stop: { afterM, standS: random.uniform(6, 45), brakingMs2, startingMs2: random.uniform(0.25, 0.6) },
  };
}

/** Distance in time that a blow keeps from trains, so that what it does to phases is not asked. */
const BLOW_CLEAR_MICROS = 4 * MICROS_PER_SECOND;

function disturb(
  definition: BridgeDefinition,
  trains: readonly PassageEvent[],
  window: { fromMicros: Micros; toMicros: Micros },
  random: RandomStream,
): SceneEvent[] {
  const events: SceneEvent[] = [];
  const lengthM = bridgeLengthM(definition);
  const anyMoment = (): Micros => Math.round(random.uniform(window.fromMicros, window.toMicros));
  if (random.chance(0.15)) {
    const fromMicros = anyMoment();
    const toMicros = fromMicros + random.integer(20, 60) * MICROS_PER_SECOND;
    events.push({ kind: 'wind', fromMicros, toMicros, rmsMs2: random.uniform(0.003, 0.02) });
  }
  if (random.chance(0.2)) {
    const micros = anyMoment();
    const clear = trains.every(
      (train) => micros < train.onMicros - BLOW_CLEAR_MICROS || micros > offMicros(train, lengthM) + BLOW_CLEAR_MICROS,
    );
    const heel = random.chance(0.5);
    const alongM = random.uniform(0.2, 0.8) * lengthM;
    const blow = heel ? { peakKn: 2.7, lengthS: 0.05 } : { peakKn: random.uniform(5, 20), lengthS: 0.006 };
    if (clear) events.push({ kind: 'blow', micros, alongM, acrossM: random.uniform(-1.5, 1.5), ...blow });
  }
  if (random.chance(0.1)) {
    const fromMicros = anyMoment();
    const [fromM, toM] = random.chance(0.5) ? [0, lengthM] : [lengthM, 0];
    const gait = { speedMs: 1.4, stepsPerS: random.uniform(1.6, 2.2), massKg: random.uniform(60, 95) };
    events.push({ kind: 'walker', fromMicros, fromM, toM, ...gait });
  }
  events.push(...spoiltChannels(definition, trains, window, random));
  return events;
}

/** A dead, noisy or spiking channel; never a gauge where a train stops, for then nothing could tell. */
function spoiltChannels(
  definition: BridgeDefinition,
  trains: readonly PassageEvent[],
  { fromMicros, toMicros }: { fromMicros: Micros; toMicros: Micros },
  random: RandomStream,
): SceneEvent[] {
  if (!random.chance(0.2)) return [];
  const stops = trains.some(({ stop }) => stop !== undefined);
  const candidates = definition.sensors.filter(
    ({ quantity }) => quantity === 'acceleration' || (quantity === 'strain' && !stops && random.chance(0.3)),
  );
  const sensor = random.pick(candidates);
  const whole = { kind: 'fault' as const, sensor: sensor.id, fromMicros, toMicros };
  const strain = sensor.quantity === 'strain';
  switch (random.integer(0, 4)) {
    case 0:
      return [{ ...whole, what: 'noise only', size: 1 }];
    case 1:
      return [{ ...whole, what: 'noisy', size: random.uniform(3, 10) }];
    case 2:
      return strain
        ? [{ ...whole, what: 'flat', size: 0 }]
        : [{ ...whole, what: 'spikes', size: random.uniform(0.02, 0.2) }];
    default:
      return [{ ...whole, what: 'flat', size: strain ? 0 : random.uniform(-1, 1) }];
  }
}

function clamp(value: number, low: number, high: number): number {
  return Math.max(low, Math.min(high, value));
}
