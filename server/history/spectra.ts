import type { SpectraView } from '#core/contract/api.ts';
import type { SpectrumLine } from '#core/contract/pipeline.ts';

/** Lines a sensor: an hour of minutes. */
const LINES = 60;
/** Sensors in all; beyond, the one heard longest ago is forgotten. */
const SENSORS = 4096;

/** The last hour of rolling spectra, in memory only: it fills again within the hour after a restart. */
export interface Spectra {
  add(line: SpectrumLine): void;
  view(bridge: string, sensor: string): SpectraView | null;
}

export function createSpectra(): Spectra {
  const kept = new Map<string, SpectrumLine[]>();
  return {
    add(line) {
      const key = `${line.bridge} ${line.sensor}`;
      const lines = kept.get(key) ?? [];
      const last = lines.at(-1);
      if (last !== undefined && line.micros <= last.micros) return; // a replay
      kept.delete(key); // so that the newest is last in the map
      kept.set(key, [...lines, line].slice(-LINES));
      if (kept.size > SENSORS) kept.delete(kept.keys().next().value ?? '');
    },
    view(bridge, sensor) {
      const lines = kept.get(`${bridge} ${sensor}`);
      const last = lines?.at(-1);
      if (lines === undefined || last === undefined) return null;
      return {
        sensor,
        stepHz: last.stepHz,
        lines: lines
          .filter(({ stepHz }) => stepHz === last.stepHz)
          .map(({ micros, psd }) => ({ micros, psd: Array.from(psd) })),
      };
    },
  };
}
