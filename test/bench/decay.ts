import { identifyDecay } from '#core/signal/decay.ts';
import { createRandom } from '../support/random.ts';
import type { Figure } from './figure.ts';

/** Free-decay identification of one passage: 16 channels, 10 s, 500 Hz, two modes in noise. */
export function benchDecay(): Figure[] {
  const random = createRandom(1);
  const channels = Array.from({ length: 16 }, (_, c) =>
    Float64Array.from({ length: 5000 }, (__, i) => {
      const t = i / 500;
      const first = Math.exp(-0.4 * t) * Math.cos(32.7 * t + c / 9);
      return (first + 0.2 * Math.exp(-1.1 * t) * Math.cos(56 * t)) * (1 + c / 16) + 0.01 * random.normal();
    }),
  );
  const times = Array.from({ length: 20 }, () => {
    const started = performance.now();
    identifyDecay(channels, 500, { expectedHz: 5.2 });
    return performance.now() - started;
  }).sort((a, b) => a - b);
  return [
    { what: 'identifyDecay, 16 channels of 10 s at 500 Hz, median', value: times[10]!, unit: 'ms', aim: '<= 50' },
  ];
}
