import { Type, type Static } from 'typebox';
import { Alarm } from './alarm.ts';
import { SensorHealth } from './health.ts';
import { Passage } from './passage.ts';
import { SystemStatus } from './status.ts';

/** Version of everything in this file. A client of another version is told so and closed. */
export const LIVE_VERSION = 2;

/** Column widths of the live envelopes that a viewer may ask for, µs. Columns lie on multiples of the width. */
export const COLUMN_MICROS = [5_000, 10_000, 20_000, 40_000, 80_000, 160_000] as const;

/** Begins to show one bridge, instead of the one before. */
const Watch = Type.Object(
  {
    type: Type.Literal('watch'),
    bridge: Type.String({ maxLength: 64 }),
    columnMicros: Type.Union([
      Type.Literal(5_000),
      Type.Literal(10_000),
      Type.Literal(20_000),
      Type.Literal(40_000),
      Type.Literal(80_000),
      Type.Literal(160_000),
    ]),
    /** All sensors where absent. */
    sensors: Type.Optional(Type.Array(Type.String({ maxLength: 64 }), { maxItems: 256 })),
    /** How much of the past to send first, s. */
    pastS: Type.Optional(Type.Number({ minimum: 0, maximum: 60 })),
  },
  { additionalProperties: false },
);

const Unwatch = Type.Object({ type: Type.Literal('unwatch') }, { additionalProperties: false });

/** By type. */
export const VIEWER_MESSAGES = { watch: Watch, unwatch: Unwatch } as const;

/** From the viewer. Anything else is answered with a complaint and counted. */
export const ViewerMessage = Type.Union([Watch, Unwatch]);
export type ViewerMessage = Static<typeof ViewerMessage>;

const LiveAxle = Type.Object({
  passage: Type.Union([Type.String(), Type.Null()]),
  sensor: Type.String(),
  micros: Type.Integer(),
  alongM: Type.Number(),
  speedMs: Type.Union([Type.Number(), Type.Null()]),
});

/** From the server, as JSON text. Envelopes come as binary frames, see frame.ts. */
export const ServerMessage = Type.Union([
  /** First message: identity of this run of the server (changes on restart) and all open alarms. */
  Type.Object({
    type: Type.Literal('hello'),
    version: Type.Integer(),
    run: Type.String(),
    nowMicros: Type.Integer(),
    status: SystemStatus,
    alarms: Type.Array(Alarm),
  }),
  /** Once a second: also the sign of life. */
  Type.Object({ type: Type.Literal('status'), nowMicros: Type.Integer(), status: SystemStatus }),
  Type.Object({ type: Type.Literal('alarm'), alarm: Alarm }),
  Type.Object({ type: Type.Literal('passage'), passage: Passage }),
  Type.Object({
    type: Type.Literal('progress'),
    bridge: Type.String(),
    passage: Type.String(),
    kind: Type.Union([Type.Literal('entered'), Type.Literal('left'), Type.Literal('discarded')]),
    micros: Type.Integer(),
  }),
  Type.Object({ type: Type.Literal('axles'), bridge: Type.String(), axles: Type.Array(LiveAxle) }),
  Type.Object({
    type: Type.Literal('spectrum'),
    bridge: Type.String(),
    sensor: Type.String(),
    micros: Type.Integer(),
    stepHz: Type.Number(),
    psd: Type.Array(Type.Number()),
  }),
  /** To those who watch the bridge: at once, once a second, and when something changes. */
  Type.Object({ type: Type.Literal('health'), bridge: Type.String(), sensors: Type.Array(SensorHealth) }),
  Type.Object({ type: Type.Literal('complaint'), code: Type.String(), message: Type.String() }),
]);
export type ServerMessage = Static<typeof ServerMessage>;

/** Close codes of the socket, in the range RFC 6455 leaves to applications. */
export const CLOSE = { slow: 4008, version: 4009, shutdown: 4010, tooMany: 4011 } as const;
