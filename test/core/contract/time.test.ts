import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { bridgeLengthM, chainageKmAt, spanAt } from '#core/contract/bridge.ts';
import { civilTime, sampleMicros, timeName } from '#core/contract/time.ts';
import { unitConversion, unitsOf } from '#core/contract/units.ts';
import { plainBridge } from '../../support/bridges.ts';

describe('event time', () => {
  it('names the calendar as the platform does, for any second of two centuries', () => {
    fc.assert(
      fc.property(fc.integer({ min: -2_208_988_800, max: 4_102_444_800 }), (seconds) => {
        const date = new Date(seconds * 1000);
        expect(civilTime(seconds)).toEqual({
          year: date.getUTCFullYear(),
          month: date.getUTCMonth() + 1,
          day: date.getUTCDate(),
          hour: date.getUTCHours(),
          minute: date.getUTCMinutes(),
          second: date.getUTCSeconds(),
        });
      }),
      { seed: 3, numRuns: 2000 },
    );
  });

  it('is a name that sorts as time does', () => {
    expect(timeName(1_764_565_953_250_000)).toBe('20251201-051233-2');
    expect(timeName(1_764_565_953_199_999) < timeName(1_764_565_953_200_000)).toBe(true);
  });

  it('of a sample is rounded to the microsecond and never drifts', () => {
    expect(sampleMicros(1_000_000, 3, 256)).toBe(1_011_719);
    expect(sampleMicros(0, 256 * 3600, 256)).toBe(3_600_000_000);
  });
});

describe('places and units', () => {
  it('count chainage from the middle of the bridge', () => {
    const bridge = plainBridge();
    expect(bridgeLengthM(bridge)).toBe(20);
    expect(chainageKmAt(bridge, 0)).toBeCloseTo(9.99, 9);
    expect(chainageKmAt(bridge, 20)).toBeCloseTo(10.01, 9);
  });

  it('put a sensor beside the bridge on the nearest span', () => {
    const span = plainBridge().spans[0]!;
    const bridge = plainBridge({ spans: [span, { ...span, id: '2', startM: 20 }] });
    expect([-3, 10, 19.9, 20.1, 99].map((alongM) => spanAt(bridge, alongM).id)).toEqual(['1', '1', '1', '2', '2']);
  });

  it('convert exactly: a milli-g is a thousandth of standard gravity, and a unit belongs to its quantity', () => {
    expect(unitConversion('mg', 'acceleration')).toEqual({ factor: 0.00980665, shift: 0 });
    expect(unitConversion('K', 'temperature')).toEqual({ factor: 1, shift: -273.15 });
    expect(unitConversion('mg', 'temperature')).toBeNull();
    expect(unitConversion('constructor', 'acceleration')).toBeNull();
    expect(unitsOf('displacement')).toEqual(['mm', 'um', 'm']);
  });
});
