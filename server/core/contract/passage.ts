import { Type, type Static } from 'typebox';
import { Measured, Quality } from './measure.ts';
import { Severity } from './severity.ts';

const MicrosType = Type.Integer();
const Nullable = <T extends Parameters<typeof Type.Union>[0][number]>(type: T) => Type.Union([type, Type.Null()]);

export const Direction = Type.Union([Type.Literal('rising'), Type.Literal('falling')]);
/** Towards rising or falling chainage. */
export type Direction = Static<typeof Direction>;

/** What one channel says against one limit, in the limit's own band. */
export const LimitMeasures = Type.Object({
  limit: Type.String(),
  /** Upper edge of the band. */
  upToHz: Type.Number(),
  /** Largest magnitude in that band, zero-phase, between samples too; and when. */
  peak: Measured,
  micros: Nullable(MicrosType),
  severity: Nullable(Severity),
  /** By level: seconds above it, and half-waves above it; a swing from above +level to below −level makes two. */
  timeAboveS: Type.Record(Type.String(), Type.Number()),
  halfWavesAbove: Type.Record(Type.String(), Type.Integer()),
});
export type LimitMeasures = Static<typeof LimitMeasures>;

/** What one channel measured during a passage. Accelerations in m/s², strain in µm/m, displacement in mm. */
export const ChannelMeasures = Type.Object({
  sensor: Type.String(),
  rateHz: Type.Number(),
  /** Removed before measuring: the mean of the quiet parts. */
  offset: Measured,
  /** Root mean square of the quiet part before the train. */
  noise: Measured,
  /** Largest magnitude of the calibrated signal, between samples too. */
  rawPeak: Measured,
  /** Largest magnitude in the band of the first limit (the code's band without one), zero-phase, between samples too. */
  bandPeak: Measured,
  bandPeakMicros: Nullable(MicrosType),
  /** Largest 1 s root mean square in the band. */
  rms: Measured,
  /** One entry for each limit that holds for this channel. */
  limits: Type.Array(LimitMeasures),
  /** Strongest frequency around the peak. */
  dominantHz: Measured,
  /** Codes of sensor conditions that held at any time in the window. */
  flags: Type.Array(Type.String()),
});
export type ChannelMeasures = Static<typeof ChannelMeasures>;

/** Where the numbers of a passage come from. */
export const Provenance = Type.Object({
  definitionVersion: Type.Integer(),
  ruleVersion: Type.String(),
  /** The low-pass of the band rule, as realised. */
  filter: Type.Object({
    kind: Type.String(),
    order: Type.Integer(),
    upToHz: Type.Number(),
    rule: Type.String(),
    phase: Type.String(),
  }),
});

/** The end of a passage's window that is an end of the samples too. */
export const Cut = Type.Union([Type.Literal('begin'), Type.Literal('end')]);
export type Cut = Static<typeof Cut>;

export const Phases = Type.Object({
  /** First axle reaches the bridge; last axle leaves it; end of the usable free decay. */
  onMicros: MicrosType,
  offMicros: MicrosType,
  freeEndMicros: MicrosType,
  /** What found them. */
  foundBy: Type.Union([
    Type.Literal('axle sensors'),
    Type.Literal('wheel-rail noise'),
    /** No train was recognised: the deck passed a level from `onMicros` to `offMicros`. */
    Type.Literal('live level'),
    /** A person said that the whole recording is one event. */
    Type.Literal('given'),
  ]),
  quality: Quality,
  notes: Type.Array(Type.String()),
});
export type Phases = Static<typeof Phases>;

export const Axle = Type.Object({
  /** When it passed the middle of the axle sensors' base, and how far behind the first axle it runs. */
  micros: MicrosType,
  behindFirstM: Type.Number(),
  /** Pulse height relative to the median axle of the train. */
  weight: Type.Number(),
});
export type Axle = Static<typeof Axle>;

export const Passage = Type.Object({
  /** Bridge id and the time name of the trigger: `ottermere-20261201-051233-2`. */
  id: Type.String(),
  bridge: Type.String(),
  /** The window it was computed from, and the tick that set it off. */
  startMicros: MicrosType,
  endMicros: MicrosType,
  triggerMicros: MicrosType,
  /** Where the samples themselves begin or end, not the train: it may have been there before or after them. */
  cut: Nullable(Cut),
  phases: Phases,
  speedMs: Measured,
  direction: Nullable(Direction),
  axleCount: Measured,
  axles: Type.Array(Axle),
  /** Peak deck acceleration: the largest band peak of the deck channels that may be trusted. */
  peak: Type.Object({
    measured: Measured,
    sensor: Nullable(Type.String()),
    micros: Nullable(MicrosType),
    limit: Nullable(Type.String()),
    severity: Nullable(Severity),
    /** Peak over the immediate action limit (or the gravest that is set); null without limits. */
    ofGravest: Nullable(Type.Number()),
  }),
  rawPeak: Measured,
  f1Hz: Measured,
  /** Damping ratio of the first mode, 1 = critical. */
  zeta1: Measured,
  /** Steel or air temperature during the passage, °C. */
  temperatureC: Measured,
  channels: Type.Array(ChannelMeasures),
  quality: Quality,
  notes: Type.Array(Type.String()),
  provenance: Provenance,
});
export type Passage = Static<typeof Passage>;
