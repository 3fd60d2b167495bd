import { describe, expect, it } from 'vitest';
import { LiveClock } from '../../../client/charts/live-clock.ts';

/** Lumps of samples every quarter second, each arriving `late` after its end. */
function run(clock: LiveClock, set: (micros: number) => void, late: number, lumps: number, from = 0): void {
  for (let i = 1; i <= lumps; i++) {
    const end = from + i * 250_000;
    set(end + late);
    clock.arrived(end);
  }
}

describe('the moment that is drawn', () => {
  it('lies behind all that is known, even just before the next lump comes', () => {
    let now = 0;
    const clock = new LiveClock(() => now);
    run(clock, (micros) => (now = micros), 120_000, 20);
    const newest = 20 * 250_000;
    now = newest + 250_000 + 119_000;
    expect(clock.now()).toBeLessThanOrEqual(newest);
  });

  it('never runs backwards while lumps come evenly', () => {
    let now = 0;
    const clock = new LiveClock(() => now);
    run(clock, (micros) => (now = micros), 120_000, 4);
    let before = clock.now();
    for (let i = 5; i < 40; i++) {
      for (let step = 0; step < 10; step++) {
        now += 25_000;
        expect(clock.now()).toBeGreaterThanOrEqual(before);
        before = clock.now();
      }
      clock.arrived(i * 250_000);
    }
  });

  it('goes on when samples stay away, so that the gap is seen', () => {
    let now = 0;
    const clock = new LiveClock(() => now);
    run(clock, (micros) => (now = micros), 120_000, 20);
    now += 30e6;
    expect(clock.now()).toBeGreaterThan(20 * 250_000 + 25e6);
    expect(clock.lagMicros).toBeLessThan(2.5e6);
  });

  it('stands still while it is held, and goes on at the present', () => {
    let now = 10e6;
    const clock = new LiveClock(() => now);
    clock.hold(true);
    now = 20e6;
    expect(clock.now()).toBe(10e6);
    clock.hold(false);
    expect(clock.now()).toBe(20e6);
  });
});
