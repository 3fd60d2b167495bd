import { describe, expect, it } from 'vitest';
import { RULE } from '#core/passage/rule.ts';
import { countAxle, standingSeconds, type AxleCount, type AxleTrack } from '#core/passage/standing.ts';

const TRACK: AxleTrack = { sensors: ['S1', 'S2'], lengthM: 20, room: 10 };
const PROVEN = { S1: true, S2: true };
/** Two coaches: distance of each axle behind the first, m. */
const AXLES_M = [0, 2.5, 16, 18.5, 25, 27.5, 41, 43.5];
const START = 1_780_000_000_000_000;

function counted(seconds: readonly number[]): AxleCount {
  return seconds.map((second) => START + Math.round(second * 1e6)).reduce<AxleCount | undefined>(countAxle, undefined)!;
}

/** Counts of a train at a constant speed, of which each sensor has seen so many axles. */
function passing(speedMs: number, seen: { S1?: number; S2?: number }, lengthM = TRACK.lengthM) {
  const at = (placeM: number, axles: number) => counted(AXLES_M.slice(0, axles).map((m) => (m + placeM) / speedMs));
  return {
    ...(seen.S1 === undefined ? {} : { S1: at(0, seen.S1) }),
    ...(seen.S2 === undefined ? {} : { S2: at(lengthM, seen.S2) }),
  };
}

function wait(counts: Record<string, AxleCount>, track = TRACK, proven: Record<string, boolean> = PROVEN): number {
  const heard = Math.max(...Object.values(counts).flatMap(({ newest }) => newest));
  return standingSeconds(track, counts, proven, null, heard);
}

describe('how long a train is waited for after quiet', () => {
  it('is short once as many axles have left as came, on a bridge longer than a coach', () => {
    expect(wait(passing(30, { S1: 8, S2: 8 }, 24), { ...TRACK, lengthM: 24 })).toBe(RULE.emptySeconds);
  });

  it('lasts until the next bogie would have come on a shorter one: (22 m − 8 m) / 7 m/s and 0.3 s', () => {
    expect(wait(passing(7, { S1: 8, S2: 8 }, 8), { ...TRACK, lengthM: 8 })).toBeCloseTo(2.3, 5);
  });

  it('counts from the last axle, so that the approach of the next train does not hold this one back', () => {
    const counts = passing(7, { S1: 8, S2: 8 }, 8);
    const lastPulse = counts.S2!.newest.at(-1)!;
    const later = standingSeconds({ ...TRACK, lengthM: 8 }, counts, PROVEN, null, lastPulse + 2_000_000);
    expect(later).toBeCloseTo(0.3, 5);
  });

  it('lasts until an axle that is on the bridge would have rolled off, at a steady speed: 20 m / 5 m/s and 0.3 s', () => {
    expect(wait(passing(5, { S1: 8, S2: 7 }))).toBeCloseTo(4.3, 1);
  });

  it('is that of a standing train where one axle is missing and the train was slowing down to less than it can stop from', () => {
    const S1 = counted([0, 0.3, 2, 2.4]);
    const S2 = counted([2.9, 3.4, 6.5]);
    expect(wait({ S1, S2 })).toBe(RULE.standUnprovenSeconds);
  });

  it('is that of a standing train where its second axle is missing and too few have passed to call it steady', () => {
    expect(wait({ S1: counted([0, 0.6]), S2: counted([7.3]) })).toBe(RULE.standUnprovenSeconds);
  });

  it('is that of a standing train where half of it has left', () => {
    const S1 = counted([0, 0.5, 4, 5]);
    const S2 = counted([4.5, 5.5]);
    expect(wait({ S1, S2 })).toBe(RULE.standSeconds);
  });

  it('is shorter where a silent sensor has never spoken', () => {
    const slow = passing(4, { S1: 8 });
    expect(wait(slow, TRACK, { S1: true })).toBe(RULE.standUnprovenSeconds);
    expect(wait(slow)).toBe(RULE.standSeconds);
  });

  it('is short where one sensor is silent but the train too fast to have stopped', () => {
    // 1.8 m in 2.5/30 s: 21.6 m/s at least, which needs 180 m to stop; 22 m take 1.02 s
    expect(wait(passing(30, { S1: 8 }))).toBeCloseTo(22 / 21.6 + 0.3, 3);
  });

  it('is short where more axles have come than find room: the other sensor is deaf', () => {
    const S1 = counted(Array.from({ length: 24 }, (_, i) => i));
    expect(wait({ S1, S2: counted([3]) })).toBe(RULE.quietSeconds);
  });

  it('is short where one sensor has counted too many before, but the last bogies have rolled off', () => {
    const { S1, S2 } = passing(4, { S1: 8, S2: 8 });
    const extra = counted([-30, -28, -27]);
    const more = { axles: S2!.axles + 3, newest: [...extra.newest, ...S2!.newest] };
    expect(wait({ S1: S1!, S2: more })).toBe(RULE.quietSeconds);
  });

  it('is that of a standing train where equal numbers do not belong together: a false pulse hides an axle', () => {
    const S1 = counted([0, 0.44, 4.1]);
    const S2 = counted([4.27, 4.76, 5.44]);
    expect(wait({ S1, S2 })).toBe(RULE.standUnprovenSeconds);
  });

  it('is the usual quiet where a track has one sensor, or nothing tells a speed', () => {
    expect(wait({ S1: counted([0, 1]) }, { ...TRACK, sensors: ['S1'] })).toBe(RULE.quietSeconds);
    const same = counted([1]);
    expect(wait({ S1: same, S2: same })).toBe(RULE.quietSeconds);
    expect(wait({ S1: counted([1, 2]), S2: same })).toBe(RULE.pulseWaitSeconds);
  });

  it('keeps no more than the newest pulses of a long train', () => {
    const long = counted(Array.from({ length: 400 }, (_, i) => i));
    expect(long.axles).toBe(400);
    expect(long.newest).toHaveLength(32);
    expect(long.newest.at(-1)).toBe(START + 399_000_000);
  });
});
