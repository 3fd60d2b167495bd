import { RandomStream } from './random.ts';

/** Trains are rows of axle loads at fixed distances. All of them are invented; none is a real vehicle. */
export interface Train {
  type: TrainType;
  /** What the record of a passage would call it. */
  name: string;
  axles: readonly TrainAxle[];
}

export interface TrainAxle {
  /** Distance behind the train's first axle, m. */
  behindFirstM: number;
  /** Static load on the rails, kN. */
  loadKn: number;
  /** Mass that moves with the rail: wheelset and what hangs on it, kg. */
  unsprungKg: number;
  /** Wheel–rail noise relative to a coach's axle (tread brakes roughen wheels). */
  roughness: number;
}

export const TRAIN_TYPES = [
  'regional multiple unit',
  'intercity',
  'block freight',
  'light engine',
  'tamping machine',
] as const;
export type TrainType = (typeof TRAIN_TYPES)[number];

/** Distance from the first axle to the last, m. */
export function trainLengthM(train: Train): number {
  return train.axles.at(-1)?.behindFirstM ?? 0;
}

/** A vehicle: length over buffers, axle places from its front buffer, mean axle load. */
interface Vehicle {
  lengthM: number;
  axlesM: readonly number[];
  axleLoadKn: number;
  unsprungKg: number;
  roughness: number;
}

/** Vehicle on two bogies: pivots and wheelbase centred in its length. */
function onBogies(
  lengthM: number,
  pivotsM: number,
  wheelbaseM: number,
  rest: Pick<Vehicle, 'axleLoadKn' | 'unsprungKg' | 'roughness'>,
): Vehicle {
  const front = (lengthM - pivotsM) / 2;
  const half = wheelbaseM / 2;
  const axlesM = [front - half, front + half, front + pivotsM - half, front + pivotsM + half];
  return { lengthM, axlesM, ...rest };
}

const LOCOMOTIVE = onBogies(19.6, 12.0, 2.9, { axleLoadKn: 202, unsprungKg: 2600, roughness: 1.2 });
const COACH = onBogies(26.4, 19.6, 2.6, { axleLoadKn: 108, unsprungKg: 1500, roughness: 1 });
const RAILCAR = onBogies(22.8, 15.6, 2.4, { axleLoadKn: 118, unsprungKg: 1600, roughness: 0.9 });
const FREIGHT_LOCOMOTIVE = onBogies(19.4, 10.6, 2.9, { axleLoadKn: 214, unsprungKg: 2700, roughness: 1.4 });
const TAMPER = onBogies(21.6, 14.2, 1.9, { axleLoadKn: 152, unsprungKg: 1700, roughness: 1.6 });

/** Hopper, tank and container wagons: length, pivots; all on the usual bogie of 1.8 m. */
const WAGON_SIZES = [
  { lengthM: 12.8, pivotsM: 7.9 },
  { lengthM: 15.6, pivotsM: 10.4 },
  { lengthM: 19.7, pivotsM: 14.2 },
] as const;

/**
 * One train of a type, its loads scattered by the seed: a few percent from axle to axle, more from wagon to wagon.
 *
 * @param seed the same seed gives the same train
 * @example createTrain('intercity', 1).axles.length // 32
 */
export function createTrain(type: TrainType, seed: number): Train {
  const random = new RandomStream(seed, `train/${type}`);
  const { name, vehicles } = consist(type, random);
  const axles: TrainAxle[] = [];
  let front = 0;
  for (const vehicle of vehicles) {
    const fill = 1 + 0.03 * bounded(random);
    for (const place of vehicle.axlesM) {
      axles.push({
        behindFirstM: front + place,
        loadKn: vehicle.axleLoadKn * fill * (1 + 0.02 * bounded(random)),
        unsprungKg: vehicle.unsprungKg,
        roughness: vehicle.roughness * (1 + 0.15 * bounded(random)),
      });
    }
    front += vehicle.lengthM;
  }
  const first = axles[0]?.behindFirstM ?? 0;
  return { type, name, axles: axles.map((axle) => ({ ...axle, behindFirstM: axle.behindFirstM - first })) };
}

function consist(type: TrainType, random: RandomStream): { name: string; vehicles: Vehicle[] } {
  switch (type) {
    case 'regional multiple unit':
      return { name: 'regional multiple unit, 3 cars', vehicles: [RAILCAR, RAILCAR, RAILCAR] };
    case 'intercity':
      return {
        name: 'intercity, locomotive and 7 coaches',
        vehicles: [LOCOMOTIVE, ...Array.from({ length: 7 }, () => COACH)],
      };
    case 'block freight': {
      const count = random.integer(12, 25);
      const wagon = freightWagon(random);
      return {
        name: `block freight, locomotive and ${count} wagons`,
        vehicles: [FREIGHT_LOCOMOTIVE, ...Array.from({ length: count }, () => wagon())],
      };
    }
    case 'light engine':
      return { name: 'light engine', vehicles: [random.chance(0.5) ? LOCOMOTIVE : FREIGHT_LOCOMOTIVE] };
    case 'tamping machine':
      return random.chance(0.5)
        ? { name: 'tamping machine with trailer', vehicles: [TAMPER, trailer()] }
        : { name: 'tamping machine with material wagon', vehicles: [TAMPER, materialWagon()] };
  }
}

/** Wagons of one block train are alike; each is loaded or, in an empty train, tare. */
function freightWagon(random: RandomStream): () => Vehicle {
  const size = random.pick(WAGON_SIZES);
  const loaded = random.chance(0.7);
  return () =>
    onBogies(size.lengthM, size.pivotsM, 1.8, {
      axleLoadKn: loaded ? 205 * (1 + 0.06 * bounded(random)) : 58 * (1 + 0.04 * bounded(random)),
      unsprungKg: 1400,
      roughness: 1.7,
    });
}

/** Two-axled trailer of the tamper. */
function trailer(): Vehicle {
  return { lengthM: 11.2, axlesM: [2.1, 9.1], axleLoadKn: 96, unsprungKg: 1300, roughness: 1.6 };
}

function materialWagon(): Vehicle {
  return onBogies(14.4, 9.2, 1.8, { axleLoadKn: 88, unsprungKg: 1400, roughness: 1.6 });
}

/** Normal deviate cut at two and a half. */
function bounded(random: RandomStream): number {
  return Math.max(-2.5, Math.min(2.5, random.normal()));
}
