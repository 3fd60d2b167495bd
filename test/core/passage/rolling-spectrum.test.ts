import { describe, expect, it } from 'vitest';
import type { SpectrumLine } from '#core/contract/pipeline.ts';
import {
  createRollingSpectrum,
  rollingStepHz,
  rollSpectrum,
  SPECTRUM_BINS_MOST,
} from '#core/passage/rolling-spectrum.ts';
import { createRandom } from '../../support/random.ts';

const RATE = 128;
const MINUTE = 60_000_000;
const START = 28_000_000 * MINUTE;

function roll(x: Float64Array, size: number, gapAt = -1): Omit<SpectrumLine, 'bridge' | 'sensor'>[] {
  const spectrum = createRollingSpectrum(RATE);
  const lines: Omit<SpectrumLine, 'bridge' | 'sensor'>[] = [];
  for (let at = 0; at < x.length; at += size) {
    const to = Math.min(x.length, at + size);
    const microsAt = (index: number): number => START + Math.round((index * 1e6) / RATE);
    rollSpectrum(spectrum, x, at, to, microsAt, at <= gapAt && gapAt < to, (line) => lines.push(line));
  }
  return lines;
}

const tone = Float64Array.from({ length: 130 * RATE }, (_, i) => 2 * Math.sin((2 * Math.PI * 10 * i) / RATE));

describe('the rolling spectrum', () => {
  it('gives a line a minute, stamped at its end', () => {
    expect(roll(tone, 100).map((line) => line.micros)).toEqual([START + MINUTE, START + 2 * MINUTE]);
  });

  it('holds the power of a sine of amplitude A: A²/2, in its line and the two beside it', () => {
    const [line] = roll(tone, 64);
    // Hann, on a bin: peak A²/(2 · 1.5 · df), neighbours a quarter of it (reference values of Welch's method).
    expect(line!.stepHz).toBe(0.25);
    expect(rollingStepHz(RATE)).toBe(0.25);
    const bin = 10 / line!.stepHz;
    expect(line!.psd[bin]).toBeCloseTo(4 / (2 * 1.5 * 0.25), 5);
    expect(line!.psd[bin - 1]).toBeCloseTo(4 / (2 * 1.5 * 0.25) / 4, 5);
    const power = line!.psd.reduce((sum, p) => sum + p * line!.stepHz, 0);
    expect(power).toBeCloseTo(2, 5);
  });

  it('holds the variance of noise over all frequencies', () => {
    const random = createRandom(3);
    const noise = Float64Array.from({ length: 61 * RATE }, () => random.normal());
    const [line] = roll(noise, 333);
    const power = line!.psd.reduce((sum, p) => sum + p * line!.stepHz, 0);
    // 29 half-overlapping segments of 512: relative error of the variance about sqrt(2 / (60 · 128)) = 1.6 %; 5 sigma.
    expect(Math.abs(power - 1)).toBeLessThan(0.08);
  });

  it('is the same for any split', () => {
    expect(roll(tone, 1)).toEqual(roll(tone, 5000));
  });

  it('starts its segment anew after a gap', () => {
    const torn = tone.slice();
    for (let i = 20 * RATE; i < torn.length; i++) torn[i] = tone[i + 7] ?? 0;
    const [line] = roll(torn, RATE, 20 * RATE);
    // A segment across the tear would leak power far from the tone.
    expect(line!.psd[30 / line!.stepHz]).toBeLessThan(1e-6);
  });

  it('keeps a stated number of bins', () => {
    const spectrum = createRollingSpectrum(2000);
    const lines: number[] = [];
    const x = new Float64Array(122_000);
    rollSpectrum(
      spectrum,
      x,
      0,
      x.length,
      (i) => START + i * 500,
      false,
      (line) => lines.push(line.psd.length),
    );
    expect(lines).toEqual([SPECTRUM_BINS_MOST]);
  });
});
