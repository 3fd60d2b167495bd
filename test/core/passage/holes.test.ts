import { describe, expect, it } from 'vitest';
import { isLowerBound } from '#core/contract/measure.ts';
import type { ChannelMeasures } from '#core/contract/passage.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { sampleMicros } from '#core/contract/time.ts';
import { measurePassage } from '#core/passage/measure.ts';
import { measureChannel } from '#core/passage/peaks.ts';
import { arrangeRecord, trusted } from '#core/passage/record.ts';
import { deckSensor, plainBridge } from '../../support/bridges.ts';
import { createRandom } from '../../support/random.ts';

// A sine of 5 Hz while the train is there, 3 m/s² but for one crest of 3.9 at 8.05 s: below 45 Hz, so that band peak,
// raw peak and the times above the limits have closed forms.
const FROM = 1_700_000_000_000_000;
const TRIGGER = FROM + 6e6;
const TO = FROM + 20e6;
const CREST_SECONDS = 8.05;
const CREST = 3.9;
const NOISE = 0.01;

const height = (t: number): number =>
  t < 6 ? 0 : t > 12 ? 3 * Math.exp(-0.6 * (t - 12)) : 3 + (CREST - 3) * Math.exp(-(((t - CREST_SECONDS) / 0.06) ** 2));
const motion = (t: number): number => height(t) * Math.sin(10 * Math.PI * t);

interface Run {
  /** Seconds from the start of the window. */
  from: number;
  to: number;
  /** How much the logger's clock stamps the run late, in samples. */
  lateSamples?: number;
}

function channelOf(rateHz: number, runs: readonly Run[], sensor = 'A1'): WindowChannel {
  const random = createRandom(5);
  const all = Float32Array.from({ length: 20 * rateHz }, (_, i) => motion(i / rateHz) + NOISE * random.normal());
  return {
    sensor,
    rateHz,
    runs: runs.map(({ from, to, lateSamples = 0 }) => {
      const [first, last] = [Math.round(from * rateHz), Math.round(to * rateHz)];
      return { startMicros: sampleMicros(FROM, first + lateSamples, rateHz), samples: all.slice(first, last) };
    }),
  };
}

function measuresOf(rateHz: number, runs: readonly Run[]): ChannelMeasures {
  const bridge = plainBridge({ sensors: [deckSensor('A1', 10, { rateHz })] });
  const [channel] = arrangeRecord(bridge, [channelOf(rateHz, runs)], TRIGGER, TO);
  return measureChannel(bridge, channel!, TRIGGER - 200_000, TO);
}

const without = (from: number, samples: number, rateHz: number): Run[] => [
  { from: 0, to: from },
  { from: from + samples / rateHz, to: 20 },
];

describe('a record with holes', () => {
  it.each([200, 256, 500, 1000])('reads the crest that one or two missing samples at %i Hz fall on', (rateHz) => {
    const crest = Math.round(CREST_SECONDS * rateHz) / rateHz;
    for (const [missing, bound] of [
      [1, 0.01],
      [2, 0.04],
    ] as const) {
      const { bandPeak, rawPeak, flags } = measuresOf(rateHz, without(crest, missing, rateHz));
      expect(flags).toEqual([]);
      expect(bandPeak).toMatchObject({ quality: 'good' });
      // what fillHole promises of one and of two samples
      expect(Math.abs(bandPeak.value! / CREST - 1)).toBeLessThan(bound);
      expect(Math.abs(rawPeak.value! / CREST - 1)).toBeLessThan(bound);
    }
  });

  it.each([3, 10, 19, 200])('calls its peak a lower bound where %i samples are missing under the train', (missing) => {
    const { bandPeak, rawPeak, rms, flags, limits } = measuresOf(500, without(CREST_SECONDS - 0.005, missing, 500));
    expect(flags).toEqual(['gap']);
    for (const measure of [bandPeak, rawPeak, rms, limits[0]!.peak]) {
      expect(isLowerBound(measure)).toBe(true);
      expect(measure).toMatchObject({ quality: 'poor' });
    }
    // never more than there was, by the noise at most
    expect(bandPeak.value).toBeLessThan(CREST + 3 * NOISE);
    expect(rawPeak.value).toBeLessThan(CREST + 4 * NOISE);
    expect(bandPeak.value).toBeGreaterThan(2.9);
  });

  it('does not mind a gap in the quiet part', () => {
    const { bandPeak, flags } = measuresOf(500, without(2, 400, 500));
    expect(flags).toEqual([]);
    expect(bandPeak.value! / CREST).toBeCloseTo(1, 2);
  });

  it('says of a channel that began late, or ended early, that its peak is a lower bound', () => {
    const late = measuresOf(500, [{ from: 9, to: 20 }]);
    expect(late.flags).toEqual(['gap']);
    expect(isLowerBound(late.bandPeak)).toBe(true);
    const early = measuresOf(500, [{ from: 0, to: 7.6 }]);
    expect(early.flags).toEqual(['gap']);
    expect(isLowerBound(early.bandPeak)).toBe(true);
    expect(early.bandPeak.value).toBeLessThan(3 + 3 * NOISE);
  });
});

describe('a logger whose clock is corrected by about a sample', () => {
  it.each([0.55, 0.7, 1, -0.6, -1])('loses nothing where it is off by %d samples on the crest', (lateSamples) => {
    for (const rateHz of [200, 500]) {
      const runs = [
        { from: 0, to: CREST_SECONDS },
        { from: CREST_SECONDS, to: 20, lateSamples },
      ];
      const { bandPeak, rawPeak, flags } = measuresOf(rateHz, runs);
      expect(flags).toEqual([]);
      expect(Math.abs(bandPeak.value! / CREST - 1)).toBeLessThan(0.01);
      expect(Math.abs(rawPeak.value! / CREST - 1)).toBeLessThan(0.02);
    }
  });

  it('keeps time within a sample however long it drifts', () => {
    const runs = Array.from({ length: 38 }, (_, k) => ({ from: k / 2, to: (k + 1) / 2, lateSamples: 0.6 * k }));
    const [channel] = arrangeRecord(plainBridge(), [channelOf(500, runs)], TRIGGER, TO);
    expect(channel!.gaps.every(({ from }) => from > 19 * 500)).toBe(true);
    // 0.6 samples a run, each filled in once a whole one is lost
    expect(channel!.filled).toBe(22);
    expect(trusted(channel!)).toBe(false);
  });
});

describe('what a peak may be uncertain by', () => {
  it('is the noise in its own band: white noise times the root of the share of the band', () => {
    const { bandPeak, rawPeak, rms, noise } = measuresOf(500, [{ from: 0, to: 20 }]);
    const error = (measure: ChannelMeasures['rms']): number => (measure.value === null ? NaN : measure.standardError!);
    expect(noise.value).toBeCloseTo(NOISE, 3);
    expect(error(rawPeak)).toBeCloseTo(NOISE, 3);
    // 45 of 250 Hz; the zero-phase Butterworth lets a little less through than a brick wall
    expect(error(bandPeak) / (NOISE * Math.sqrt(45 / 250))).toBeGreaterThan(0.85);
    expect(error(bandPeak) / (NOISE * Math.sqrt(45 / 250))).toBeLessThan(1.1);
    expect(error(rms)).toBeCloseTo(error(bandPeak) / Math.sqrt(90), 6);
  });
});

describe('the time above a limit', () => {
  // A sin above L for 2 acos(L/A)/ω of each half-wave; a train of 6 s at 5 Hz has 60.
  it.each([200, 256, 500, 1000])('is that of the sine between the samples, also at %i Hz', (rateHz) => {
    const [deck] = measuresOf(rateHz, [{ from: 0, to: 20 }]).limits;
    const above = (2 * Math.acos(2.8 / 3)) / (10 * Math.PI);
    expect(deck!.timeAboveS['IL']).toBeGreaterThan(59 * above);
    expect(deck!.timeAboveS['IL']! / (60 * above)).toBeCloseTo(1, 1);
    expect(deck!.halfWavesAbove).toMatchObject({ IAL: 1 });
    expect(deck!.timeAboveS['IAL']).toBeGreaterThan(0);
    expect(deck!.severity).toBe('IAL');
  });

  it('counts a half-wave for every level that the peak is above', () => {
    const bridge = plainBridge({ sensors: [deckSensor('A1', 10, { rateHz: 200 })] });
    for (let level = 3.7; level < 3.95; level += 0.002) {
      const limits = [{ ...bridge.limits[0]!, levels: { AL: level } }];
      const [channel] = arrangeRecord(bridge, [channelOf(200, [{ from: 0, to: 20 }])], TRIGGER, TO);
      const [said] = measureChannel({ ...bridge, limits }, channel!, TRIGGER, TO).limits;
      expect(said!.severity === 'AL').toBe(said!.halfWavesAbove['AL']! > 0);
    }
  });
});

describe('a passage that the recording cuts', () => {
  const bridge = plainBridge({ sensors: [5, 10, 15].map((alongM, i) => deckSensor(`A${i + 1}`, alongM)) });
  const frame = { id: 'x', triggerMicros: TRIGGER, fromMicros: FROM, toMicros: TO, cut: null };
  const rolling = (from: number, to: number): WindowChannel[] => {
    const random = createRandom(9);
    return ['A1', 'A2', 'A3'].map((sensor) => {
      const samples = Float32Array.from({ length: 10_000 }, (_, i) => {
        const t = i / 500;
        return motion(t) + (t >= 6 && t <= 12 ? 0.4 : 0.01) * random.normal();
      });
      return {
        sensor,
        rateHz: 500,
        runs: [{ startMicros: FROM + from * 1e6, samples: samples.slice(from * 500, to * 500) }],
      };
    });
  };

  it('has a peak that is a lower bound, where it stops with the train still there', () => {
    const passage = measurePassage(bridge, 1, { ...frame, toMicros: FROM + 9e6, cut: 'end' }, rolling(0, 9))!;
    expect(isLowerBound(passage.peak.measured)).toBe(true);
    expect(passage.quality).toBe('poor');
    expect(passage.notes.join()).toMatch(/the recording stops -?0\.\d\d s after the last axle that was seen/);
  });

  it('has a peak that is a lower bound, where it begins with the train already there', () => {
    const passage = measurePassage(
      bridge,
      1,
      { ...frame, fromMicros: FROM + 7e6, triggerMicros: FROM + 7e6, cut: 'begin' },
      rolling(7, 20),
    );
    expect(isLowerBound(passage!.peak.measured)).toBe(true);
    expect(passage!.notes).toContain('the recording begins 0.05 s before the first axle that was seen');
  });

  it('is a good one, where it holds the whole train', () => {
    const passage = measurePassage(bridge, 1, frame, rolling(0, 20))!;
    expect(passage.peak.measured).toMatchObject({ quality: 'good' });
    expect(passage.notes.join()).not.toContain('the recording');
  });
});
