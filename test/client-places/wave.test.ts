import { describe, expect, it } from 'vitest';
import { decodeFrame, encodeFrame } from '#core/contract/frame.ts';
import { notMeasurable } from '#core/contract/measure.ts';
import { bandLimited } from '../../client/charts/band.ts';
import { decayOf } from '../../client/charts/decay.ts';
import { comparisonSpec, nearest, waveformSpec } from '../../client/charts/passage-plots.ts';
import { spectraOf } from '../../client/charts/spectrum.ts';
import { filterRuns, indexAt, plotColumns, valueAt, wavesOf, type Wave } from '../../client/charts/wave.ts';
import { hangingFill, onlyAbove, tracePath } from '../../client/charts/trace.ts';
import { bridge, passageOf, START } from './passage.ts';

const text = (bytes: Uint8Array): string => new TextDecoder().decode(bytes);
const RATE = 500;

function waveOf(sensor: string, seconds: number, at: (second: number) => number): Wave {
  const samples = Float32Array.from({ length: seconds * RATE }, (_, i) => at(i / RATE));
  return { sensor, rateHz: RATE, startMicros: START, samples };
}

describe('a wave form from its frame', () => {
  const header = {
    bridge: 'b',
    kind: 'record' as const,
    layout: 'samples' as const,
    channels: [
      { sensor: 'A1', startMicros: START, stepMicros: 2000, count: 3, at: 0 },
      { sensor: 'A2', startMicros: START, stepMicros: 2000, count: 1, at: 5 },
      { sensor: 'A1', startMicros: START + 10_000, stepMicros: 2000, count: 2, at: 3 },
    ],
  };
  const frame = decodeFrame(encodeFrame(header, Float32Array.of(1, 2, 3, 6, 7, 9)), text);

  it('joins the runs of a sensor and leaves its gap empty', () => {
    const wave = wavesOf(frame).get('A1')!;
    expect([...wave.samples]).toEqual([1, 2, 3, Number.NaN, Number.NaN, 6, 7]);
    expect(wave.rateHz).toBe(500);
  });

  it('gives plots null in a gap, never NaN and never a zero', () => {
    const wave = wavesOf(frame).get('A1')!;
    const { seconds, values } = plotColumns(wave, START, START, START + 1e6);
    expect(values).toEqual([1, 2, 3, null, null, 6, 7]);
    expect(seconds[6]).toBeCloseTo(0.012, 12);
    expect(valueAt(wave, START + 6_000)).toBeNull();
    expect(valueAt(wave, START - 2_000)).toBeNull();
  });

  it('filters each side of a gap by itself and drops runs that are too short', () => {
    const wave = wavesOf(frame).get('A1')!;
    const filtered = filterRuns(wave, 3, (run) => run.map((value) => value * 10));
    expect([...filtered.samples]).toEqual([10, 20, 30, Number.NaN, Number.NaN, Number.NaN, Number.NaN]);
  });
});

describe('traces', () => {
  it('keep a peak of one sample however many samples share a pixel', () => {
    const samples = new Float32Array(10_000);
    samples[4321] = 5;
    const path = tracePath(
      samples,
      0,
      samples.length,
      (i) => i / 100,
      (value) => -value,
    );
    expect(path).toContain(' -5');
  });

  it('break at a gap', () => {
    const samples = Float32Array.of(1, 1, Number.NaN, 1, 1);
    expect(
      tracePath(
        samples,
        0,
        5,
        (i) => i * 10,
        (value) => value,
      ).match(/M/g),
    ).toHaveLength(2);
  });

  it('ink only the positive half, and close each run', () => {
    const fill = hangingFill(
      Float32Array.of(1, -1, Number.NaN, 2),
      0,
      4,
      (i) => i * 10,
      (value) => value * 4,
    );
    expect(fill).toBe('M0 0L4 0L0 10L0 10ZM0 30L8 30L0 30Z');
  });

  it('pick out what is above a limit, on both sides', () => {
    expect([...onlyAbove(Float32Array.of(1, -3, 2.5, 2), 2.2)]).toEqual([Number.NaN, -3, 2.5, Number.NaN]);
  });
});

describe('the band that limits look at', () => {
  it('takes the stored offset away and keeps what lies below the edge', () => {
    const passage = passageOf({ offset: 0.5 });
    const raw = new Map([['A1', waveOf('A1', 8, (t) => 0.5 + Math.sin(2 * Math.PI * 5 * t))]]);
    const wave = bandLimited(raw, bridge, passage).get('A1')!;
    const middle = [...wave.samples.subarray(1000, 3000)];
    // A sine far below the edge: its greatest sample is its amplitude, 500 Hz / 5 Hz hits the crest exactly.
    expect(Math.max(...middle)).toBeCloseTo(1, 4);
    expect(Math.min(...middle)).toBeCloseTo(-1, 4);
  });

  it('takes away what lies far above the edge', () => {
    // Butterworth, order 4, both ways, −3 dB at 30 Hz: 100 Hz is down by more than 80 dB.
    const raw = new Map([['A1', waveOf('A1', 8, (t) => Math.sin(2 * Math.PI * 100 * t))]]);
    const wave = bandLimited(raw, bridge, passageOf({})).get('A1')!;
    expect(Math.max(...wave.samples.subarray(1000, 3000).map(Math.abs))).toBeLessThan(1e-4);
  });

  it('leaves axle sensors as they are', () => {
    const raw = new Map([['S1', waveOf('S1', 8, (t) => Math.sin(2 * Math.PI * 100 * t))]]);
    expect(bandLimited(raw, bridge, passageOf({})).get('S1')).toBe(raw.get('S1'));
  });
});

describe('a free decay', () => {
  const f1 = 5;
  const zeta = 0.012;
  const passage = passageOf({ f1, zeta });
  const off = (passage.phases.offMicros - START) / 1e6;
  const ring = (t: number): number =>
    t < off ? 0 : 2 * Math.exp(-2 * Math.PI * f1 * zeta * (t - off)) * Math.cos(2 * Math.PI * f1 * (t - off));
  const wave = waveOf('A1', 14, ring);

  it('has an envelope that falls with the damping that made it', () => {
    const { envelope } = decayOf(wave, passage)!;
    const inner = envelope.slice(2, -2);
    const first = inner[0]!;
    const last = inner.at(-1)!;
    const rate = Math.log(first.amplitude / last.amplitude) / (last.second - first.second);
    // Closed form 2π f ζ; the band-pass is flat over the line, so 1 % is left for its edges.
    expect(rate / (2 * Math.PI * f1 * zeta)).toBeCloseTo(1, 2);
  });

  it('lays the line of the stored f1 and ζ1 through it', () => {
    const { fit } = decayOf(wave, passage)!;
    expect(fit!.perSecond).toBeCloseTo(2 * Math.PI * f1 * zeta, 12);
    expect(fit!.amplitude).toBeGreaterThan(1.8);
    expect(fit!.amplitude).toBeLessThan(2.2);
  });

  it('is not drawn where f1 is not measurable, and has no line where ζ1 is not', () => {
    expect(decayOf(wave, { ...passage, f1Hz: notMeasurable('too short') })).toBeNull();
    expect(decayOf(wave, { ...passage, zeta1: notMeasurable('too short') })!.fit).toBeNull();
  });
});

describe('spectra of forced part and free decay', () => {
  it('have the frequency of a line and, by Parseval, its mean square', () => {
    const passage = passageOf({ f1: 5 });
    const wave = waveOf('A1', 14, (t) => 3 * Math.sin(2 * Math.PI * 7.8125 * t));
    const { stepHz, free } = spectraOf(wave, passage)!;
    const peak = free!.indexOf(Math.max(...free!));
    expect(peak * stepHz).toBeCloseTo(7.8125, 1);
    const power = free!.reduce((sum, value) => sum + value, 0) * stepHz;
    expect(power / 4.5).toBeCloseTo(1, 2);
  });

  it('leave out a part with a gap instead of bridging it', () => {
    const passage = passageOf({ f1: 5 });
    const wave = waveOf('A1', 14, (t) => Math.sin(2 * Math.PI * 5 * t));
    wave.samples[indexAt(wave, passage.phases.onMicros) + 40] = Number.NaN;
    const lines = spectraOf(wave, passage)!;
    expect(lines.forced).toBeNull();
    expect(lines.free).not.toBeNull();
  });
});

describe('pictures of a passage', () => {
  it('mark the peak of the chosen sensor with the gravest level it passed', () => {
    const passage = passageOf({ peak: 2.9 });
    const spec = waveformSpec(
      bridge,
      passage,
      bridge.sensors[0]!,
      waveOf('A1', 14, (t) => Math.sin(t)),
    );
    expect(spec.marks).toHaveLength(1);
    expect(spec.marks![0]!.severity).toBe('IL');
    expect(spec.limits!.lines.map(({ severity }) => severity)).toEqual(['IAL', 'IL', 'AL']);
  });

  it('give an axle sensor no limits and no mark', () => {
    const spec = waveformSpec(
      bridge,
      passageOf({}),
      bridge.sensors[1]!,
      waveOf('S1', 14, () => 1),
    );
    expect(spec.limits!.lines).toEqual([]);
    expect(spec.marks).toEqual([]);
  });

  it('align two passages at their first axles', () => {
    const here = passageOf({});
    const there = { ...passageOf({}), phases: { ...here.phases, onMicros: here.phases.onMicros + 250_000 } };
    const wave = waveOf('A1', 14, (t) => t);
    const spec = comparisonSpec(
      bridge,
      bridge.sensors[0]!,
      { passage: here, wave, tag: 'a' },
      { passage: there, wave, tag: 'b' },
    );
    const i = nearest(spec.x.values, 1);
    const [a, b] = spec.series;
    expect(b!.values[i]! - a!.values[i]!).toBeCloseTo(0.25, 6);
  });
});
