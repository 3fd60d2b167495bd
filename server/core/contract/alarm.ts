import { Type, type Static } from 'typebox';
import { Severity } from './severity.ts';

const Nullable = <T extends Parameters<typeof Type.Union>[0][number]>(type: T) => Type.Union([type, Type.Null()]);

/** ISA-18.2 / IEC 62682 states that this version uses. */
export const AlarmState = Type.Union([
  Type.Literal('unacknowledged'),
  Type.Literal('returned to normal, unacknowledged'),
  Type.Literal('acknowledged'),
  Type.Literal('normal'),
]);
export type AlarmState = Static<typeof AlarmState>;

export const AlarmKind = Type.Union([Type.Literal('level'), Type.Literal('no data'), Type.Literal('sensor')]);
export type AlarmKind = Static<typeof AlarmKind>;

/** A step in an alarm's life, kept for ever. */
export const AlarmStep = Type.Object({
  /** Wall clock for acknowledged and published, event time for the rest. */
  micros: Type.Integer(),
  /** When the server took the step, by its wall clock. */
  takenMicros: Type.Integer(),
  what: Type.Union([
    Type.Literal('raised'),
    Type.Literal('escalated'),
    Type.Literal('confirmed'),
    Type.Literal('corrected'),
    Type.Literal('inconclusive'),
    Type.Literal('no passage'),
    Type.Literal('returned'),
    Type.Literal('acknowledged'),
    Type.Literal('published'),
  ]),
  severity: Nullable(Severity),
  value: Nullable(Type.Number()),
  sensor: Nullable(Type.String()),
  by: Nullable(Type.String()),
  /** Of a person who acknowledged; of a fault that raised a sensor's alarm; why the record could not judge. */
  note: Nullable(Type.String()),
});
export type AlarmStep = Static<typeof AlarmStep>;

/**
 * What became of an alarm of the live signal, by the record of its passage: the same severity, another one, or no judgement
 * (inconclusive: the record has no value, or is incomplete and does not reach what live saw), or no train was recognised and
 * no record made. In the last two the live value stands.
 */
export const Verdict = Type.Union([
  Type.Literal('confirmed'),
  Type.Literal('corrected'),
  Type.Literal('inconclusive'),
  Type.Literal('no passage'),
]);
export type Verdict = Static<typeof Verdict>;

export const Alarm = Type.Object({
  /** Deterministic: bridge, rule, and time name of the first crossing. */
  id: Type.String(),
  bridge: Type.String(),
  kind: AlarmKind,
  /** Limit id; logger id for no data; sensor id for a sensor alarm. */
  rule: Type.String(),
  state: AlarmState,
  severity: Severity,
  raisedMicros: Type.Integer(),
  /** Live value: causal filter, largest so far, and the channel that saw it. Null for no data. */
  liveValue: Nullable(Type.Number()),
  sensor: Nullable(Type.String()),
  /** Sensors that passed a limit in this alarm. */
  sensors: Type.Array(Type.String()),
  /** The record's value (zero-phase, whole window); null until it is known, and where it cannot judge. */
  recordValue: Nullable(Type.Number()),
  recordSeverity: Nullable(Severity),
  /** The record's value is a lower bound: a part of the passage was not recorded. Absent: it is not. */
  recordAtLeast: Type.Optional(Type.Boolean()),
  /** Null until it is known; always null where the alarm is not of a level. */
  verdict: Nullable(Verdict),
  /** Said when a neighbour that should have felt it did not. */
  doubt: Nullable(Type.String()),
  passage: Nullable(Type.String()),
  /** Passages above the same limit in the day before this one, by the record. */
  passagesAboveInDay: Type.Integer(),
  returnedMicros: Nullable(Type.Integer()),
  acknowledged: Nullable(Type.Object({ micros: Type.Integer(), by: Type.String(), note: Type.String() })),
  steps: Type.Array(AlarmStep, { maxItems: 200 }),
  /** One sentence for a person. */
  message: Type.String(),
});
export type Alarm = Static<typeof Alarm>;
