import type { Sensor } from '../contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';

/** Live speed of the train on the bridge, from the first pulse at one axle sensor and the first at another. */
export interface LiveSpeed {
  firsts: { sensor: string; alongM: number; micros: Micros }[];
  newest: Micros;
  speedMs: number | null;
}

/** Silence that parts one train from the next, µs. */
const PAUSE_MICROS = 3 * MICROS_PER_SECOND;

export function createLiveSpeed(): LiveSpeed {
  return { firsts: [], newest: -Infinity, speedMs: null };
}

/**
 * @returns signed speed, m/s, positive towards rising chainage; null until a second sensor has seen the train
 */
export function noteLivePulse(live: LiveSpeed, sensor: Sensor, micros: Micros): number | null {
  if (micros - live.newest > PAUSE_MICROS) {
    live.firsts = [];
    live.speedMs = null;
  }
  live.newest = Math.max(live.newest, micros);
  if (live.firsts.every((first) => first.sensor !== sensor.id)) {
    live.firsts.push({ sensor: sensor.id, alongM: sensor.alongM, micros });
    const [a, b] = live.firsts;
    if (a !== undefined && b !== undefined && a.micros !== b.micros && Math.abs(a.alongM - b.alongM) >= 1) {
      live.speedMs = ((b.alongM - a.alongM) * MICROS_PER_SECOND) / (b.micros - a.micros);
    }
  }
  return live.speedMs;
}
