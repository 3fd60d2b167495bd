import { describe, expect, it } from 'vitest';
import { notMeasurable } from '#core/contract/measure.ts';
import type { AxleReading } from '#core/passage/axles.ts';
import { findPhases, offEdge, onEdge } from '#core/passage/phases.ts';
import { plainBridge } from '../../support/bridges.ts';

const NOISE = 1_780_000_000_000_000;
/** An edge of motion so many seconds after that of noise. */
const motion = (seconds: number, strength: number) => ({ micros: NOISE + seconds * 1e6, strength });
const after = (micros: number): number => (micros - NOISE) / 1e6;

describe('the first axle', () => {
  it.each([
    ['by noise where motion tells nothing', null, 0],
    ['by motion where the two are near, faint or plain', motion(0.2, 20), 0.2],
    ['by motion before noise where they are near', motion(-0.25, 500), -0.25],
    ['by the earlier where they are far apart: motion', motion(-0.5, 500), -0.5],
    ['by the earlier where they are far apart: noise', motion(0.5, 500), 0],
  ])('is placed %s', (_, edge, expected) => {
    expect(after(onEdge(NOISE, edge))).toBeCloseTo(expected, 6);
  });
});

describe('the last axle', () => {
  it.each([
    ['by noise where motion tells nothing', null, true, 0],
    ['by plain motion near noise', motion(-0.2, 500), true, -0.2],
    ['by noise where the deck is hardly moved and no mode rings in the band of the noise', motion(-0.2, 20), true, 0],
    ['by motion, faint as it is, where modes ring in that band', motion(-0.2, 20), false, -0.2],
    ['by plain motion well before noise that rings on', motion(-0.5, 500), false, -0.5],
    ['by the later where noise is clear of modes', motion(-0.5, 500), true, 0],
    ['by the later where motion is faint', motion(-0.5, 20), false, 0],
    ['by motion well after noise that died early', motion(0.5, 20), true, 0.5],
  ])('is placed %s', (_, edge, clear, expected) => {
    expect(after(offEdge(NOISE, edge, clear))).toBeCloseTo(expected, 6);
  });
});

describe('a train whose axle sensors do not agree, and whose noise is not heard', () => {
  const axlesBy = (heardBy: number): AxleReading => ({
    trains: 1,
    count: notMeasurable('the axle sensors do not agree'),
    axles: [],
    speedMs: notMeasurable('the axle sensors do not agree'),
    direction: null,
    onMicros: null,
    offMicros: null,
    firstPulse: NOISE + 1e6,
    lastPulse: NOISE + 9e6,
    heardBy,
    notes: [],
  });
  const frame = { id: 'x', triggerMicros: NOISE, fromMicros: NOISE - 5e6, toMicros: NOISE + 20e6, cut: null };

  it('was there all the same where two sensors saw axles enough; when, is poorly known', () => {
    expect(findPhases(plainBridge(), frame, axlesBy(2), null, [])).toMatchObject({
      onMicros: NOISE + 1e6,
      offMicros: NOISE + 9e6,
      foundBy: 'axle sensors',
      quality: 'poor',
    });
  });

  it('was none where only one sensor did', () => {
    expect(findPhases(plainBridge(), frame, axlesBy(1), null, [])).toBeNull();
  });
});
