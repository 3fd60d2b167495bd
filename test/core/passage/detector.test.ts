import { describe, expect, it } from 'vitest';
import { createDetector, detect, interrupt, neededFrom, type DetectorEvent } from '#core/passage/detector.ts';
import { TICK_MICROS } from '#core/passage/rule.ts';

const SETTING = { bridge: 'b', freeSeconds: 6, axleTracks: [{ sensors: ['S1', 'S2'], lengthM: 20, room: 10 }] };
const FIRST = 17_000_000_000;
const QUIET = 1e-6;
const LOUD = 1;

interface Scene {
  /** Ticks, from 0, in which the named channels are loud. */
  loud?: (tick: number) => string[];
  pulses?: (tick: number) => string[];
  channels?: string[];
}

/** Runs ticks [0, count) and lists events as `kind@tick`. */
function run(
  count: number,
  scene: Scene,
  track: { lengthM: number; room: number } = { lengthM: 20, room: 10 },
  skip: (tick: number) => boolean = () => false,
) {
  const detector = createDetector();
  const setting = { ...SETTING, axleTracks: [{ sensors: ['S1', 'S2'], ...track }] };
  const events: DetectorEvent[] = [];
  for (let i = 0; i < count; i++) {
    if (skip(i)) continue;
    const loud = scene.loud?.(i) ?? [];
    const powers = (scene.channels ?? ['A1', 'A2', 'A3']).map((sensor) => ({
      sensor,
      power: loud.includes(sensor) ? LOUD : QUIET,
    }));
    const micros = (FIRST + i) * TICK_MICROS + 30_000;
    const pulses = (scene.pulses?.(i) ?? []).map((sensor) => ({ sensor, micros }));
    events.push(...detect(detector, setting, { number: FIRST + i, powers, pulses, speedMs: null }));
  }
  const told = events.map((event) => event.kind);
  return { detector, events, told };
}

const all = ['A1', 'A2', 'A3'];
const between =
  (from: number, to: number, names: string[]) =>
  (tick: number): string[] =>
    tick >= from && tick < to ? names : [];

/** Two coaches: distance of each axle behind the first, m. */
const TWO_COACHES = [0, 2.5, 16, 18.5, 25, 27.5, 41, 43.5];

/**
 * Pulses of a train that reaches the first sensor at tick 100, brakes at 0.8 m/s² until its first axle has come
 * `stopM` beyond it, rests, and goes on at 5 m/s.
 */
function braking(train: { axlesM: number[]; lengthM: number; stopM: number; restTicks: number }) {
  const { axlesM, lengthM, stopM, restTicks } = train;
  const v0 = Math.sqrt(2 * 0.8 * stopM);
  const secondsAt = (wayM: number): number =>
    wayM <= stopM ? (v0 - Math.sqrt(v0 * v0 - 1.6 * wayM)) / 0.8 : v0 / 0.8 + restTicks / 10 + (wayM - stopM) / 5;
  const ticksOf = (sensorM: number): number[] => axlesM.map((axle) => 100 + Math.floor(10 * secondsAt(axle + sensorM)));
  const [entry, exit] = [ticksOf(0), ticksOf(lengthM)];
  return (tick: number): string[] => [
    ...entry.filter((at) => at === tick).map(() => 'S1'),
    ...exit.filter((at) => at === tick).map(() => 'S2'),
  ];
}

describe('the passage detector', () => {
  it('makes one window of a train: quiet before, free part after', () => {
    const { events, told } = run(400, { loud: between(100, 140, all) });
    expect(told).toEqual(['entered', 'left', 'window']);
    const window = events[2]!;
    expect(window).toMatchObject({
      fromMicros: (FIRST + 50) * TICK_MICROS,
      toMicros: (FIRST + 140 + 60) * TICK_MICROS,
    });
    expect(window.candidate.id).toMatch(/^b-\d{8}-\d{6}-\d$/);
  });

  it('is not set off by one channel alone where there are several: a failing cable', () => {
    expect(run(400, { loud: between(100, 300, ['A2']) }).told).toEqual([]);
  });

  it('is set off by one channel where there is only one', () => {
    expect(run(400, { loud: between(100, 140, ['A2']), channels: ['A2'] }).told).toEqual(['entered', 'left', 'window']);
  });

  it('forgets a short blow', () => {
    expect(run(400, { loud: between(100, 102, all) }).told).toEqual([]);
  });

  it('enters on pulses of two axle sensors even where no noise is heard, and starts at the first', () => {
    const { events, told } = run(400, { pulses: (i) => (i === 100 ? ['S1'] : i === 105 ? ['S2'] : []) });
    expect(told).toEqual(['entered', 'left', 'window']);
    expect(events[0]).toMatchObject({ micros: (FIRST + 100) * TICK_MICROS });
  });

  it('does not take a single stray pulse for a train', () => {
    expect(run(400, { pulses: (i) => (i === 100 ? ['S1'] : []) }).told).toEqual([]);
  });

  it('keeps a passage open while the axle count says that a train stands on the bridge', () => {
    // Eight axles enter, four leave, a minute of rest, four leave.
    const { told } = run(1200, { pulses: braking({ axlesM: TWO_COACHES, lengthM: 20, stopM: 44, restTicks: 600 }) });
    expect(told).toEqual(['entered', 'left', 'window']);
  });

  it('keeps a passage open while a train stands astride of a bridge shorter than its coaches', () => {
    // Rests with the bogies of one coach on either side: as many axles have left as have come.
    const { told } = run(
      1200,
      { pulses: braking({ axlesM: TWO_COACHES, lengthM: 8, stopM: 12, restTicks: 600 }) },
      { lengthM: 8, room: 6 },
    );
    expect(told).toEqual(['entered', 'left', 'window']);
  });

  it('keeps a passage open while one axle of a braking train is on the bridge', () => {
    const { told } = run(1200, { pulses: braking({ axlesM: TWO_COACHES, lengthM: 20, stopM: 21, restTicks: 600 }) });
    expect(told).toEqual(['entered', 'left', 'window']);
  });

  it('parts two fast trains although one gauge is dead: what runs fast cannot have stopped on the bridge', () => {
    const fast = (from: number) => (i: number) => (i >= from && i < from + 4 ? ['S1'] : []);
    const first = fast(100);
    const second = fast(140);
    const { told } = run(
      400,
      {
        loud: (i) => [...between(100, 112, all)(i), ...between(140, 152, all)(i)],
        pulses: (i) => [...first(i), ...second(i)],
      },
      { lengthM: 10, room: 6 },
    );
    expect(told).toEqual(['entered', 'left', 'window', 'entered', 'left', 'window']);
  });

  it('gives up waiting for a gauge that has never spoken', () => {
    const { events, told } = run(600, {
      loud: between(100, 140, all),
      pulses: (i) => (i >= 100 && i < 140 ? ['S1'] : []),
    });
    expect(told).toEqual(['entered', 'left', 'window']);
    const left = events[1]!;
    expect(left.candidate.lastActiveTick).toBe(FIRST + 139);
  });

  it('ends the free part of one train where the next begins', () => {
    const loud = (i: number): string[] => (between(100, 140, all)(i).length > 0 ? all : between(170, 210, all)(i));
    const { events, told } = run(500, { loud });
    expect(told).toEqual(['entered', 'left', 'window', 'entered', 'left', 'window']);
    expect(events[2]).toMatchObject({ kind: 'window', toMicros: (FIRST + 165) * TICK_MICROS });
    // The second window does not reach back into the first train.
    expect(events[5]).toMatchObject({ kind: 'window', fromMicros: (FIRST + 140) * TICK_MICROS });
  });

  it('closes at once where the data end for longer than the quiet it would wait for', () => {
    const { told } = run(400, { loud: between(100, 140, all) }, undefined, (i) => i >= 140 && i < 300);
    expect(told).toEqual(['entered', 'left', 'window']);
  });

  it('closes what is open at the end of a recording', () => {
    const { detector, told } = run(130, { loud: between(100, 140, all) });
    expect(told).toEqual(['entered']);
    expect(interrupt(detector, SETTING).map((event) => event.kind)).toEqual(['left', 'window']);
    expect(interrupt(detector, SETTING)).toEqual([]);
  });

  it('lets its floor follow slow changes but not a train', () => {
    // Noise that grows tenfold over five minutes must not count as a train.
    const detector = createDetector();
    const told: string[] = [];
    for (let i = 0; i < 3000; i++) {
      const power = 1e-3 * 10 ** (i / 3000);
      const powers = all.map((sensor) => ({ sensor, power }));
      told.push(
        ...detect(detector, SETTING, { number: FIRST + i, powers, pulses: [], speedMs: null }).map(
          (event) => event.kind,
        ),
      );
    }
    expect(told).toEqual([]);
  });

  it('asks for no more of the past than it needs', () => {
    const idle = run(50, {}).detector;
    const now = (FIRST + 50) * TICK_MICROS;
    expect(now - neededFrom(idle, now)).toBe(12_000_000);
    const busy = run(300, { loud: between(100, 300, all) }).detector;
    const later = (FIRST + 300) * TICK_MICROS;
    expect(later - neededFrom(busy, later)).toBe(26_000_000);
  });
});
