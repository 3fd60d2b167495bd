import { Type, type Static } from 'typebox';
import { Alarm } from './alarm.ts';
import { BridgeDefinition } from './bridge.ts';
import { SensorHealth } from './health.ts';
import { Passage } from './passage.ts';
import { Severity } from './severity.ts';
import { BridgeStatus } from './status.ts';

/**
 * The HTTP interface under /api. These schemas are the one source of types, validation and OpenAPI.
 *
 *   GET  /api/status                                SystemStatus
 *   GET  /api/bridges                               BridgeStatus[]
 *   GET  /api/bridges/:bridge                       BridgeView
 *   GET  /api/bridges/:bridge/definition?version=   text/yaml as it was given
 *   GET  /api/bridges/:bridge/spectra?sensor=       SpectraView: up to the last hour of rolling spectra
 *   GET  /api/passages?…PassageQuery                PassagePage
 *   GET  /api/days?…DayQuery                        Day[]
 *   GET  /api/passages/:passage                     PassageView
 *   GET  /api/passages/:passage/waveform            Frame (application/octet-stream), kind `record`, layout `samples`
 *   GET  /api/passages/:passage/waveform.csv        text/csv, all channels or ?sensor=
 *   GET  /api/passages/:passage/waveform.parquet    the archive file itself
 *   GET  /api/passages/:passage/recomputed          Recomputed
 *   GET  /api/alarms?…AlarmQuery                    Alarm[]
 *   GET  /api/alarms/:alarm                         Alarm
 *   POST /api/alarms/:alarm/acknowledge             Acknowledgement → Alarm
 *   GET  /api/errors                                ErrorRow[]
 *   GET  /api/openapi.json · GET /metrics · WS /live
 */

const Nullable = <T extends Parameters<typeof Type.Union>[0][number]>(type: T) => Type.Union([type, Type.Null()]);
const MicrosType = Type.Integer({ minimum: 0 });

export const BridgeView = Type.Object({
  status: BridgeStatus,
  definition: BridgeDefinition,
  version: Type.Integer(),
  versions: Type.Array(Type.Object({ version: Type.Integer(), sinceMicros: Type.Integer() })),
  sensors: Type.Array(SensorHealth),
  /** The upper band edge in force of each limit, Hz, with what set it. */
  bands: Type.Array(Type.Object({ limit: Type.String(), upToHz: Type.Number(), setBy: Type.String() })),
});
export type BridgeView = Static<typeof BridgeView>;

export const PassageQuery = Type.Object(
  {
    bridge: Type.Optional(Type.String()),
    fromMicros: Type.Optional(MicrosType),
    toMicros: Type.Optional(MicrosType),
    minPeak: Type.Optional(Type.Number()),
    maxPeak: Type.Optional(Type.Number()),
    minSpeed: Type.Optional(Type.Number()),
    maxSpeed: Type.Optional(Type.Number()),
    direction: Type.Optional(Type.Union([Type.Literal('rising'), Type.Literal('falling')])),
    quality: Type.Optional(Type.Union([Type.Literal('good'), Type.Literal('usable'), Type.Literal('poor')])),
    order: Type.Optional(Type.Union([Type.Literal('time'), Type.Literal('peak')])),
    limit: Type.Optional(Type.Integer({ minimum: 1, maximum: 1000 })),
    /** From `next` of the page before. */
    cursor: Type.Optional(Type.String({ maxLength: 200 })),
  },
  { additionalProperties: false },
);
export type PassageQuery = Static<typeof PassageQuery>;

/** A passage in a list: what tables and day strips need. */
export const PassageRow = Type.Object({
  id: Type.String(),
  bridge: Type.String(),
  onMicros: Type.Integer(),
  peak: Nullable(Type.Number()),
  /** Whether the peak is but a lower bound; absent where it is not. */
  peakAtLeast: Type.Optional(Type.Boolean()),
  sensor: Nullable(Type.String()),
  severity: Nullable(Severity),
  ofGravest: Nullable(Type.Number()),
  speedMs: Nullable(Type.Number()),
  direction: Nullable(Type.Union([Type.Literal('rising'), Type.Literal('falling')])),
  axles: Nullable(Type.Integer()),
  f1Hz: Nullable(Type.Number()),
  zeta1: Nullable(Type.Number()),
  temperatureC: Nullable(Type.Number()),
  quality: Type.String(),
  alarm: Nullable(Type.String()),
});
export type PassageRow = Static<typeof PassageRow>;

export const PassagePage = Type.Object({
  rows: Type.Array(PassageRow),
  /** How many there are in all, without limit and cursor. */
  total: Type.Integer(),
  next: Nullable(Type.String()),
});
export type PassagePage = Static<typeof PassagePage>;

export const DayQuery = Type.Object(
  {
    bridge: Type.String(),
    /** Civil days in the bridge's time zone, `2026-12-01`, both included; at most 400. */
    from: Type.String({ pattern: '^\\d{4}-\\d{2}-\\d{2}$', description: 'a day, YYYY-MM-DD' }),
    to: Type.String({ pattern: '^\\d{4}-\\d{2}-\\d{2}$', description: 'a day, YYYY-MM-DD' }),
  },
  { additionalProperties: false },
);
export type DayQuery = Static<typeof DayQuery>;

export const Day = Type.Object({
  day: Type.String(),
  /** Of local midnight; a day of a clock change has 23 or 25 hours. */
  startMicros: Type.Integer(),
  endMicros: Type.Integer(),
  passages: Type.Integer(),
  highest: Nullable(Type.Number()),
  above: Type.Object({ AL: Type.Integer(), IL: Type.Integer(), IAL: Type.Integer() }),
  /** One mark a passage. */
  marks: Type.Array(
    Type.Object({
      id: Type.String(),
      micros: Type.Integer(),
      peak: Nullable(Type.Number()),
      ofGravest: Nullable(Type.Number()),
      severity: Nullable(Severity),
    }),
  ),
  /** Spans of time without monitoring. */
  noData: Type.Array(Type.Object({ fromMicros: Type.Integer(), toMicros: Type.Integer() })),
  /** When monitoring of the bridge began, where that was within or after this day: an empty row was no quiet day. */
  beganMicros: Type.Optional(Type.Integer()),
});
export type Day = Static<typeof Day>;

export const PassageView = Type.Object({
  passage: Passage,
  /** The definition in force when it crossed. */
  definition: BridgeDefinition,
  earlier: Nullable(Type.String()),
  later: Nullable(Type.String()),
  alarms: Type.Array(Alarm),
  /** Earlier passages of the same direction and axle count, nearest in speed first, for comparison. */
  alike: Type.Array(PassageRow),
  /** False once retention has thinned its wave form. */
  hasWaveform: Type.Boolean(),
});
export type PassageView = Static<typeof PassageView>;

export const Recomputed = Type.Object({
  same: Type.Boolean(),
  /** Paths of fields that differ, with both values. */
  differences: Type.Array(Type.Object({ field: Type.String(), stored: Type.String(), recomputed: Type.String() })),
  passage: Passage,
});
export type Recomputed = Static<typeof Recomputed>;

export const SpectraView = Type.Object({
  sensor: Type.String(),
  stepHz: Type.Number(),
  lines: Type.Array(Type.Object({ micros: Type.Integer(), psd: Type.Array(Type.Number()) })),
});
export type SpectraView = Static<typeof SpectraView>;

export const AlarmQuery = Type.Object(
  {
    bridge: Type.Optional(Type.String()),
    /** `open` is all that is not back to normal and answered. */
    which: Type.Optional(Type.Union([Type.Literal('open'), Type.Literal('all')])),
    fromMicros: Type.Optional(MicrosType),
    toMicros: Type.Optional(MicrosType),
    limit: Type.Optional(Type.Integer({ minimum: 1, maximum: 1000 })),
  },
  { additionalProperties: false },
);
export type AlarmQuery = Static<typeof AlarmQuery>;

export const Acknowledgement = Type.Object(
  { by: Type.String({ minLength: 1, maxLength: 80 }), note: Type.String({ maxLength: 2000 }) },
  { additionalProperties: false },
);
export type Acknowledgement = Static<typeof Acknowledgement>;

export const ErrorRow = Type.Object({
  code: Type.String(),
  what: Type.String(),
  remedy: Type.String(),
  count: Type.Integer(),
  /** Newest case, for a person. */
  last: Nullable(Type.String()),
});
export type ErrorRow = Static<typeof ErrorRow>;

/** Body of every answer that is not 2xx. */
export const ApiComplaint = Type.Object({ code: Type.String(), message: Type.String() });
export type ApiComplaint = Static<typeof ApiComplaint>;
