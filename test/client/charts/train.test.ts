import { describe, expect, it } from 'vitest';
import { LiveTrain, type AxlePulse } from '../../../client/charts/train.ts';
import { bogiesOf, vehiclesOf } from '../../../client/charts/vehicles.ts';

const T0 = 1_764_565_953_000_000;
const V = 40;
const BEHIND = [0, 2.5, 19, 21.5];

/** Pulses of a train at constant speed over sensors at 0 and 16 m; the speed is known from the second sensor on. */
function pulses(direction: 1 | -1, passage: string | null = 'p1'): AxlePulse[] {
  const first = direction > 0 ? 0 : 16;
  const known = T0 + (16 / V) * 1e6;
  return [0, 16]
    .flatMap((alongM) =>
      BEHIND.map((behind) => {
        const micros = Math.round(T0 + ((Math.abs(alongM - first) + behind) / V) * 1e6);
        return { passage, sensor: `S${alongM}`, micros, alongM, speedMs: micros >= known ? direction * V : null };
      }),
    )
    .sort((a, b) => a.micros - b.micros);
}

describe('the train on the bridge', () => {
  it('runs at the estimated speed between its pulses, in both directions', () => {
    for (const direction of [1, -1] as const) {
      const train = new LiveTrain();
      train.take(pulses(direction));
      const seconds = 0.9;
      const places = train.axlesAt(T0 + seconds * 1e6).map(({ alongM }) => alongM);
      const first = direction > 0 ? 0 : 16;
      BEHIND.forEach((behind, i) => {
        // Uniform motion is the closed form; times are whole microseconds, 40 µm at this speed.
        expect(places[i]).toBeCloseTo(first + direction * (V * seconds - behind), 3);
      });
    }
  });

  it('comes to the same however its pulses are cut into messages, and twice does not count twice', () => {
    const all = pulses(1);
    const whole = new LiveTrain();
    whole.take(all);
    const cut = new LiveTrain();
    for (const pulse of all) cut.take([pulse]);
    cut.take(all);
    expect(cut.axleCount).toBe(4);
    expect(cut.axlesAt(T0 + 5e5)).toEqual(whole.axlesAt(T0 + 5e5));
  });

  it('is held back where its next axle does not come to the last sensor: it has stopped', () => {
    const train = new LiveTrain();
    // Two axles cross, the next two have entered and are due at 16 m after 0.4 s.
    train.take(pulses(1).filter(({ alongM, micros }) => alongM === 0 || micros < T0 + 0.6e6));
    const due = T0 + ((19 + 16) / V) * 1e6;
    const soon = train.axlesAt(due + 400_000).map(({ alongM }) => alongM);
    expect(soon[2]).toBeCloseTo(16 + V * 0.4, 3);
    const later = train.axlesAt(due + 600_000).map(({ alongM }) => alongM);
    expect(later[2]).toBeCloseTo(16 + V * 0.5, 3);
    expect(train.axlesAt(due + 60e6).map(({ alongM }) => alongM)).toEqual(later);
  });

  it('without a speed is only drawn over the sensor that felt it', () => {
    const train = new LiveTrain();
    train.take(pulses(1).slice(0, 1));
    expect(train.axlesAt(T0 + 50_000)).toEqual([{ index: 0, alongM: 0 }]);
    expect(train.axlesAt(T0 + 500_000)).toEqual([]);
    expect(train.axlesAt(T0 - 1)).toEqual([]);
  });

  it('stands no longer where an axle was missed at the last sensor, once the server says that it has left', () => {
    const train = new LiveTrain();
    train.take(pulses(1).filter(({ alongM, micros }) => alongM === 0 || micros < T0 + 0.6e6));
    const last = (): number => train.axlesAt(T0 + 10e6).at(-1)!.alongM;
    train.leave('another');
    expect(last()).toBeLessThan(16 + V * 0.5);
    train.leave('p1');
    expect(last()).toBeCloseTo(V * 10 - 21.5, 3);
  });

  it('gives way to the next one', () => {
    const train = new LiveTrain();
    train.take(pulses(1));
    train.take(pulses(-1, 'p2').map((pulse) => ({ ...pulse, micros: pulse.micros + 60e6 })));
    expect([train.passage, train.axleCount, train.speedMs]).toEqual(['p2', 4, -V]);
  });

  it('is not taken for the one before it where passages have no name yet', () => {
    const train = new LiveTrain();
    train.take(pulses(1, null));
    train.take(pulses(1, null).map((pulse) => ({ ...pulse, micros: pulse.micros + 60e6 })));
    expect(train.axleCount).toBe(4);
  });
});

describe('axle patterns', () => {
  it('join the axles of bogies', () => {
    expect(bogiesOf(BEHIND)).toEqual([
      { first: 0, last: 1 },
      { first: 2, last: 3 },
    ]);
    expect(bogiesOf([0, 1.8, 3.6, 10, 11.8, 13.6])).toEqual([
      { first: 0, last: 2 },
      { first: 3, last: 5 },
    ]);
    expect(bogiesOf([])).toEqual([]);
  });

  it('keep short wagons apart whose bogies are nearly as near to each other as their axles', () => {
    // Two four-axle wagons of 13.5 m: 1.8 m in the bogie, 2.7 m from wagon to wagon.
    const wagons = [1.35, 3.15, 10.35, 12.15, 14.85, 16.65, 23.85, 25.65];
    expect(bogiesOf(wagons)).toHaveLength(4);
    expect(vehiclesOf(wagons, bogiesOf(wagons))).toHaveLength(2);
  });

  it('tell vehicles where bogies of one are farther apart than vehicles', () => {
    const coaches = [0, 2.5, 19, 21.5, 26.4, 28.9, 45.4, 47.9];
    const vehicles = vehiclesOf(coaches, bogiesOf(coaches));
    expect(vehicles).toHaveLength(2);
    // Between them, the two ends and the coupling share the 4.9 m evenly.
    expect(vehicles[0]!.toM).toBeCloseTo(21.5 + 4.9 / 2 - 0.35, 9);
    expect(vehicles[1]!.fromM).toBeCloseTo(26.4 - 4.9 / 2 + 0.35, 9);
  });

  it('draw no outline where the pattern does not tell vehicles', () => {
    const even = Array.from({ length: 10 }, (_, i) => i * 6);
    expect(vehiclesOf(even, bogiesOf(even))).toEqual([]);
    expect(vehiclesOf([0], bogiesOf([0]))).toEqual([]);
  });
});
