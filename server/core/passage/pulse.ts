/**
 * Finds axle pulses on a rail strain gauge or wheel sensor as the samples come. A pulse is told when the signal has
 * fallen to half of its crest, so it is a few milliseconds old. The record's axles are found again, with hindsight, in
 * axles.ts; this one serves the moving picture and the count of axles on the bridge.
 */
export interface PulseFinder {
  /** Running mean of the signal between pulses. */
  base: number;
  /** Running mean with a short memory, and of the squared deviation from it: a wheel at rest near the gauge is no noise. */
  near: number;
  variance: number;
  seen: number;
  /** Typical pulse height of late; 0 before the first. */
  height: number;
  /** Crest of the pulse in hand; 0 when there is none. */
  crest: number;
  /** Samples since the crest. */
  age: number;
  /** The samples about the crest, for its place between samples. */
  before: number;
  after: number;
  last: number;
  /** Deepest value since the last crest: the next pulse must rise out of it. */
  valley: number;
}

/** Samples over which the base line is learnt before pulses are believed, s; and its memory after that, s. */
const LEARN_SECONDS = 1;
const BASE_SECONDS = 10;
const NEAR_SECONDS = 0.5;
/** A crest stands above the base by this many standard deviations, and by this share of the usual height. */
const SIGMAS = 8;
const SHARE = 0.15;
/** It rises out of the valley before it and falls behind by this share of that: a slowly coming load is no pulse for its noise. */
const PROMINENCE = 0.75;

export function createPulseFinder(): PulseFinder {
  return {
    base: 0,
    near: 0,
    variance: 0,
    seen: 0,
    height: 0,
    crest: 0,
    age: 0,
    before: 0,
    after: 0,
    last: 0,
    valley: 0,
  };
}

/** @param tell index in `x` of a crest, fractional and perhaps below zero; and its height */
export function findPulses(
  finder: PulseFinder,
  x: Float32Array,
  from: number,
  to: number,
  rateHz: number,
  tell: (index: number, height: number) => void,
): void {
  const learn = Math.ceil(LEARN_SECONDS * rateHz);
  const slow = 1 / (BASE_SECONDS * rateHz);
  const quick = 1 / (NEAR_SECONDS * rateHz);
  for (let i = from; i < to; i++) {
    const value = x[i]! - finder.base;
    const threshold = Math.max(SIGMAS * Math.sqrt(finder.variance), SHARE * finder.height, 1e-9);
    if (finder.seen < learn || Math.abs(value) < threshold / 2) {
      finder.seen += 1;
      const gain = Math.max(1 / finder.seen, slow);
      finder.base += gain * value;
      if (finder.seen === 1) finder.near = x[i]!;
      const beside = x[i]! - finder.near;
      finder.near += Math.max(1 / finder.seen, quick) * beside;
      finder.variance += gain * (beside * beside - finder.variance);
    }
    if (finder.seen >= learn) follow(finder, value, i, threshold, tell);
    finder.last = value;
  }
}

function follow(
  finder: PulseFinder,
  value: number,
  i: number,
  threshold: number,
  tell: (index: number, height: number) => void,
): void {
  if (finder.crest === 0) {
    finder.valley = Math.min(finder.valley, value);
    if (value > threshold && value - Math.max(finder.valley, 0) > PROMINENCE * threshold) raise(finder, value);
  } else if (value > finder.crest) {
    raise(finder, value);
  } else {
    finder.age += 1;
    if (finder.age === 1) finder.after = value;
    if (value < finder.crest / 2 && finder.crest - value > PROMINENCE * threshold) {
      const bend = finder.before - 2 * finder.crest + finder.after;
      const shift = bend < 0 ? (0.5 * (finder.before - finder.after)) / bend : 0;
      tell(i - finder.age + Math.max(-0.5, Math.min(0.5, shift)), finder.crest);
      finder.height = finder.height === 0 ? finder.crest : finder.height + 0.2 * (finder.crest - finder.height);
      finder.crest = 0;
      finder.valley = value;
    }
  }
}

function raise(finder: PulseFinder, value: number): void {
  finder.crest = value;
  finder.age = 0;
  finder.before = finder.last;
  finder.after = value;
}
