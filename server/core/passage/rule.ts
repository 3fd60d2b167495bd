/**
 * The rules by which passages are found and measured, in one place and under one version. A stored passage names the
 * version it was made with; any change here that can change a number needs a new one.
 */
export const RULE_VERSION = '2026-12-5';

/** Features of the stream are gathered on a fixed grid of event time, so that no split of the samples can matter. */
export const TICK_MICROS = 100_000;

/** Slower channels (temperature) take no part in detection and are not held to be flat or gappy. */
export const DYNAMIC_HZ = 10;

export const RULE = {
  /** Live offset: a running mean of this time constant; also the shortest settling before levels are watched. */
  offsetSeconds: 5,
  settleSeconds: 2,
  /** Band filter: Butterworth low-pass of this order, live in one pass, on the record forward and backward. */
  bandOrder: 4,
  /** Wheel-rail noise is looked for above max(noiseFromHz, noiseOverF1 × f1), at most 0.3 × rate. */
  noiseFromHz: 30,
  noiseOverF1: 5,
  noiseOrder: 4,
  /** For the phases, well above the third bending mode (9 f1), which rings on after the last axle. */
  phaseNoiseFromHz: 60,
  phaseNoiseOverF1: 12,
  /** A channel is active in a tick where its noise power is this many times its quiet floor. */
  activeRatio: 9,
  /** The floor is never believed below this r.m.s., m/s²: the resolution of a good deck accelerometer (common practice). */
  floorLeast: 0.003,
  /** A train makes this many active ticks in a row, or pulses on two axle sensors. */
  activeTicks: 3,
  /** The window of one train ends so many ticks before the next sets off: its approach is heard a little earlier. */
  approachTicks: 5,
  /** A passage is over after this much quiet, once no axle is known to be on the bridge. */
  quietSeconds: 1.5,
  /** No passage is over without this much quiet, in ticks, since its last axle. */
  restTicks: 5,
  /** Quiet that parts two trains when every axle that came has left, and the longest way between axles of one train. */
  emptySeconds: 0.8,
  bogieDistanceM: 22,
  /** An axle this much slower than the fastest before it brakes: its train may stop, if it can within the way left. */
  brakingShare: 0.9,
  /** No train brakes harder, m/s²: full braking of passenger stock (common practice). */
  brakingMs2: 1.3,
  /** After a first pulse the next bogie of a creeping train is waited for: 18 m at 3 m/s. */
  pulseWaitSeconds: 6,
  /** How long a train may stand on the bridge while the axle count says it is there. */
  standSeconds: 900,
  /** The same where that is less sure: a sensor has said nothing yet, or one pulse may have been missed. */
  standUnprovenSeconds: 120,
  /** Quiet part before the train, and bounds of the free part after it. */
  beforeSeconds: 5,
  freeSecondsLeast: 6,
  freeSecondsMost: 20,
  /** The free part lasts this many time constants 1/(ζω) of the first mode as defined. */
  freeTimeConstants: 4,
  /** An alarm level counts as left after this long below the alert limit. */
  returnSeconds: 10,
  /** How many ticks the others wait for a channel that lags. */
  waitTicks: 30,
  /** Wave form kept in idle times, for the quiet part before the next train. */
  idleSeconds: 12,
  /** A gap is declared when samples this far ahead are in hand. */
  reorderSeconds: 1.5,
} as const;
