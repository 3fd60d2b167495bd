import { Type, type Static } from 'typebox';
import { Levels } from './severity.ts';

/**
 * The definition of one bridge, as written by its engineer in one YAML file.
 *
 * Positions: `along` in metres from the first bearing towards rising chainage, `across` in metres from the
 * centre line of the deck, positive to the right when looking towards rising chainage.
 */

const Id = Type.String({ pattern: '^[A-Za-z0-9][A-Za-z0-9_.-]{0,31}$' });
const Text = Type.String({ minLength: 1, maxLength: 200 });

export const Structure = Type.Union([
  Type.Literal('steel trough'),
  Type.Literal('steel plate girder'),
  Type.Literal('steel truss'),
  Type.Literal('steel box girder'),
  Type.Literal('composite'),
  Type.Literal('prestressed concrete'),
  Type.Literal('reinforced concrete'),
  Type.Literal('filler beam'),
  Type.Literal('masonry arch'),
  Type.Literal('other'),
]);
export type Structure = Static<typeof Structure>;

export const TrackType = Type.Union([Type.Literal('ballasted'), Type.Literal('direct fastened')]);
export type TrackType = Static<typeof TrackType>;

export const Span = Type.Object(
  {
    id: Id,
    startM: Type.Number({ minimum: 0, maximum: 10_000 }),
    lengthM: Type.Number({ exclusiveMinimum: 0, maximum: 1000 }),
    structure: Structure,
    track: TrackType,
    tracks: Type.Optional(Type.Integer({ minimum: 1, maximum: 8 })),
    massPerMetreKg: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 1e6 })),
    /** Natural frequencies as far as known. f1: first bending; f3: third mode of the member, of any shape. */
    frequenciesHz: Type.Optional(
      Type.Object(
        {
          f1: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 100 })),
          f2: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 500 })),
          f3: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 500 })),
          torsion: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 500 })),
        },
        { additionalProperties: false },
      ),
    ),
    dampingPercent: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 30 })),
  },
  { additionalProperties: false },
);
export type Span = Static<typeof Span>;

export const Quantity = Type.Union([
  Type.Literal('acceleration'),
  Type.Literal('strain'),
  Type.Literal('displacement'),
  Type.Literal('temperature'),
  Type.Literal('axle detector'),
]);
export type Quantity = Static<typeof Quantity>;

export const Mount = Type.Union([
  Type.Literal('deck'),
  Type.Literal('girder'),
  Type.Literal('bearing'),
  Type.Literal('rail'),
  Type.Literal('ballast'),
  Type.Literal('air'),
]);

export const Sensor = Type.Object(
  {
    id: Id,
    name: Type.Optional(Text),
    quantity: Quantity,
    logger: Id,
    mount: Mount,
    direction: Type.Optional(
      Type.Union([Type.Literal('vertical'), Type.Literal('lateral'), Type.Literal('longitudinal')]),
    ),
    alongM: Type.Number({ minimum: -1000, maximum: 11_000 }),
    acrossM: Type.Optional(Type.Number({ minimum: -50, maximum: 50 })),
    /** Unit of the samples as the logger sends them; see units.ts. */
    unit: Type.String({ minLength: 1, maxLength: 16 }),
    /** Value in `unit` = scale × raw + offset. */
    scale: Type.Optional(Type.Number()),
    offset: Type.Optional(Type.Number()),
    /** Measuring range in `unit`; values at its ends count as clipped. */
    range: Type.Optional(Type.Array(Type.Number(), { minItems: 2, maxItems: 2 })),
    rateHz: Type.Number({ exclusiveMinimum: 0, maximum: 20_000 }),
    /** True where each axle leaves one pulse: rail strain, wheel sensor. Axle detectors always do. */
    countsAxles: Type.Optional(Type.Boolean()),
    /** Quiet noise, r.m.s. in SI, above which the sensor is not to be trusted. */
    noiseLimit: Type.Optional(Type.Number({ exclusiveMinimum: 0 })),
  },
  { additionalProperties: false },
);
export type Sensor = Static<typeof Sensor>;

export const Logger = Type.Object(
  {
    id: Id,
    /** Silence for longer than this is announced as "no data". */
    silentAfterS: Type.Optional(Type.Number({ minimum: 1, maximum: 86_400 })),
    /** For a logger that cannot be changed: its own topic, payload kind and channel names. */
    topic: Type.Optional(Type.String({ minLength: 1, maxLength: 256 })),
    payload: Type.Optional(Type.Union([Type.Literal('samples'), Type.Literal('senml')])),
    /** Name in the payload → sensor id. */
    channels: Type.Optional(Type.Record(Type.String({ minLength: 1, maxLength: 128 }), Id)),
  },
  { additionalProperties: false },
);
export type Logger = Static<typeof Logger>;

/** `EN 1990 A2` takes max(30 Hz, 1.5 f1, f3) of the span, clause A2.4.4.2.1(4)P; or a fixed upper frequency. */
export const BandRule = Type.Union([
  Type.Literal('EN 1990 A2'),
  Type.Object({ upToHz: Type.Number({ exclusiveMinimum: 0, maximum: 10_000 }) }, { additionalProperties: false }),
]);
export type BandRule = Static<typeof BandRule>;

export const Limit = Type.Object(
  {
    id: Id,
    quantity: Type.Literal('peak deck acceleration'),
    /** In m/s². */
    levels: Levels,
    band: BandRule,
    /** The spans it holds for; all where absent. */
    spans: Type.Optional(Type.Array(Id, { minItems: 1 })),
    /** Who set it, on what ground. */
    source: Text,
  },
  { additionalProperties: false },
);
export type Limit = Static<typeof Limit>;

export const BridgeDefinition = Type.Object(
  {
    spanbeat: Type.Literal(1),
    id: Type.String({ pattern: '^[a-z0-9][a-z0-9-]{0,31}$' }),
    name: Text,
    line: Type.Object(
      { name: Text, speedKmh: Type.Optional(Type.Number({ exclusiveMinimum: 0, maximum: 600 })) },
      { additionalProperties: false },
    ),
    /** Chainage of the middle of the bridge. */
    chainageKm: Type.Number({ minimum: 0, maximum: 100_000 }),
    /** IANA name; days and printed local times follow it. UTC where absent. */
    timeZone: Type.Optional(Type.String({ minLength: 1, maxLength: 64 })),
    /** What the bridge leads over, for its drawing. */
    crosses: Type.Optional(
      Type.Union([Type.Literal('water'), Type.Literal('road'), Type.Literal('railway'), Type.Literal('land')]),
    ),
    spans: Type.Array(Span, { minItems: 1, maxItems: 100 }),
    loggers: Type.Array(Logger, { minItems: 1, maxItems: 64 }),
    sensors: Type.Array(Sensor, { minItems: 1, maxItems: 256 }),
    limits: Type.Array(Limit, { maxItems: 32 }),
    /** The site's instruction to the duty engineer, one step a line. */
    instruction: Type.Optional(Type.Array(Text, { maxItems: 20 })),
  },
  { additionalProperties: false },
);
export type BridgeDefinition = Static<typeof BridgeDefinition>;

/** Where a span lies. */
export type SpanPlace = Pick<Span, 'startM' | 'lengthM'>;

/** Length from the first bearing to the last, m. */
export function bridgeLengthM(bridge: { spans: readonly SpanPlace[] }): number {
  return Math.max(...bridge.spans.map((span) => span.startM + span.lengthM));
}

/** Chainage in km of a position along the bridge. */
export function chainageKmAt(bridge: Pick<BridgeDefinition, 'spans' | 'chainageKm'>, alongM: number): number {
  return bridge.chainageKm + (alongM - bridgeLengthM(bridge) / 2) / 1000;
}

/** The span a position lies on: the one that contains it, else the nearest. */
export function spanAt<Place extends SpanPlace>(bridge: { spans: readonly Place[] }, alongM: number): Place {
  const distance = (span: Place): number => Math.max(span.startM - alongM, alongM - span.startM - span.lengthM, 0);
  return bridge.spans.reduce((best, span) => (distance(span) < distance(best) ? span : best));
}

/** Whether a sensor measures what the deck-acceleration limits speak of: vertical acceleration of deck or girder. */
export function isDeckAcceleration(sensor: Partial<Pick<Sensor, 'quantity' | 'mount' | 'direction'>>): boolean {
  return (
    sensor.quantity === 'acceleration' &&
    (sensor.mount === 'deck' || sensor.mount === 'girder') &&
    (sensor.direction ?? 'vertical') === 'vertical'
  );
}

/** Whether each axle leaves one pulse on this sensor. */
export function countsAxles(sensor: Partial<Pick<Sensor, 'quantity' | 'countsAxles'>>): boolean {
  return sensor.quantity === 'axle detector' || sensor.countsAxles === true;
}

/** Axle sensors this far apart across the deck belong to different tracks, m; tracks lie 3.5 m apart and more. */
const TRACK_APART_M = 1.2;

/** The axle sensors of each track, in order of position; sensors of one track lie about the same line. */
export function axleTracks(bridge: Pick<BridgeDefinition, 'sensors'>): Sensor[][] {
  const tracks: Sensor[][] = [];
  for (const sensor of bridge.sensors.filter(countsAxles).sort((a, b) => a.alongM - b.alongM)) {
    const own = tracks.find(([first]) => Math.abs((first!.acrossM ?? 0) - (sensor.acrossM ?? 0)) < TRACK_APART_M);
    if (own === undefined) tracks.push([sensor]);
    else own.push(sensor);
  }
  return tracks;
}
