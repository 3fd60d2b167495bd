import { Type, type Static } from 'typebox';

/** What can be wrong with a channel. Each has a start and, in time, an end. */
export const ConditionCode = Type.Union([
  Type.Literal('silent'),
  Type.Literal('gap'),
  Type.Literal('overlap'),
  Type.Literal('duplicate'),
  Type.Literal('disorder'),
  Type.Literal('clock step'),
  Type.Literal('clock drift'),
  Type.Literal('rate wrong'),
  Type.Literal('not a number'),
  Type.Literal('clipped'),
  Type.Literal('flat'),
  Type.Literal('spike'),
  Type.Literal('noise high'),
  Type.Literal('offset drift'),
  Type.Literal('twin channel'),
]);
export type ConditionCode = Static<typeof ConditionCode>;

/** A condition of one sensor began, happened once more, or ended. */
export const SensorCondition = Type.Object({
  bridge: Type.String(),
  sensor: Type.String(),
  code: ConditionCode,
  state: Type.Union([Type.Literal('began'), Type.Literal('happened'), Type.Literal('ended')]),
  micros: Type.Integer(),
  /** For a person: what was seen, with numbers and units. */
  detail: Type.String(),
});
export type SensorCondition = Static<typeof SensorCondition>;

/** One sensor as the Bridges place shows it. */
export const SensorHealth = Type.Object({
  sensor: Type.String(),
  /** Newest sample; null before the first. */
  newestMicros: Type.Union([Type.Integer(), Type.Null()]),
  samples: Type.Integer(),
  /** Conditions that hold now. */
  active: Type.Array(Type.Object({ code: ConditionCode, sinceMicros: Type.Integer(), detail: Type.String() })),
  /** How often each condition was met since the bridge was defined here. */
  counts: Type.Record(Type.String(), Type.Integer()),
  /** r.m.s. of the last quiet minute, in the quantity's SI unit. */
  noise: Type.Union([Type.Number(), Type.Null()]),
  offset: Type.Union([Type.Number(), Type.Null()]),
  /** Of a thermometer, its newest sample as it was measured, in SI; absent before the first. */
  reading: Type.Optional(Type.Object({ micros: Type.Integer(), value: Type.Number() })),
});
export type SensorHealth = Static<typeof SensorHealth>;
