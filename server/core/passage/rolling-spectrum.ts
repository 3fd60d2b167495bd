import type { SpectrumLine } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { addSamples, createSpectrum, restartSpectrum, takeLine, type Spectrum } from '../signal/welch.ts';

/**
 * A spectrum a minute of one channel: Welch's mean over half-overlapping Hann segments of about four seconds, minutes
 * on the clock of event time. Plain data.
 */
export interface RollingSpectrum {
  spectrum: Spectrum;
  minute: number;
}

/** Most bins that are kept of a line, from 0 Hz up. */
export const SPECTRUM_BINS_MOST = 512;

const SEGMENT_SECONDS = 4;
const MINUTE_MICROS = 60 * MICROS_PER_SECOND;

export function createRollingSpectrum(rateHz: number): RollingSpectrum {
  return { spectrum: createSpectrum(rateHz, { segment: segmentOf(rateHz), detrend: 'none' }), minute: -1 };
}

/**
 * Distance of the bins of a rolling spectrum, Hz.
 *
 * @param rateHz samples per second
 * @example rollingStepHz(512) // 0.25
 */
export const rollingStepHz = (rateHz: number): number => rateHz / segmentOf(rateHz);

const segmentOf = (rateHz: number): number => 2 ** Math.round(Math.log2(SEGMENT_SECONDS * rateHz));

/** Takes samples in order; tells a line whenever a minute is over and at least one segment was whole. */
export function rollSpectrum(
  rolling: RollingSpectrum,
  x: Float64Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  afterGap: boolean,
  tell: (line: Omit<SpectrumLine, 'bridge' | 'sensor'>) => void,
): void {
  const { spectrum } = rolling;
  if (afterGap) restartSpectrum(spectrum);
  let at = from;
  while (at < to) {
    const minute = Math.floor(microsAt(at) / MINUTE_MICROS);
    if (minute !== rolling.minute) {
      const line = takeLine(spectrum);
      if (line !== null) {
        const psd = Float32Array.from(line.psd.subarray(0, SPECTRUM_BINS_MOST));
        tell({ micros: (rolling.minute + 1) * MINUTE_MICROS, stepHz: line.stepHz, psd });
      }
      rolling.minute = minute;
    }
    const left = Math.ceil((((minute + 1) * MINUTE_MICROS - microsAt(at)) * spectrum.rateHz) / MICROS_PER_SECOND);
    const end = Math.min(to, at + Math.max(1, left));
    addSamples(spectrum, x, at, end);
    at = end;
  }
}
