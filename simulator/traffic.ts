import { bridgeLengthM, type BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { offMicros, type PassageEvent } from './passage.ts';
import { RandomStream } from './random.ts';
import { createTrain, type Train, type TrainType } from './train.ts';

/** One train on its way over the bridges of a line. */
export interface LineTrain {
  train: Train;
  direction: 'rising' | 'falling';
  speedMs: number;
  /** Its passages, in the order it makes them. */
  passages: readonly { bridge: string; event: PassageEvent }[];
}

/** The traffic of one line, planned as far ahead as it is asked for. */
export interface LineTraffic {
  /** Trains planned anew, so that every passage that begins before `micros` has been given. */
  until(micros: Micros): LineTrain[];
}

export interface TrafficOptions {
  /** Bridges of one single-track line. */
  bridges: readonly BridgeDefinition[];
  startMicros: Micros;
  seed: number;
  /** From one train to the next at the middle of the line, s. */
  headwayS?: { least: number; most: number };
  /** Trains that run whatever comes, by the time they reach a bridge. */
  fixed?: readonly FixedTrain[];
}

/** A train that is in the timetable by name. */
interface FixedTrain {
  type: TrainType;
  direction: 'rising' | 'falling';
  speedMs: number;
  bridge: string;
  onMicros: Micros;
}

const USUAL_HEADWAY_S = { least: 18, most: 30 };
/** A bridge rings off and is quiet for a moment before the next train reaches it, s. */
const CLEAR_S = 18;
/** The slowest train from one end of the line to the other takes this long at most, s; so far ahead is planned. */
const LONGEST_WAY_S = 420;
/** A train that finds no place within this is cancelled, s. */
const LATEST_S = 90;

/** Shares of the traffic and speeds, m/s. Line speed is 44.4 m/s; an intercity on time runs close below it. */
const MIX: readonly { type: TrainType; share: number; speedMs: readonly [number, number] }[] = [
  { type: 'intercity', share: 0.4, speedMs: [40, 44.4] },
  { type: 'regional multiple unit', share: 0.35, speedMs: [30, 39] },
  { type: 'block freight', share: 0.13, speedMs: [20, 27] },
  { type: 'light engine', share: 0.08, speedMs: [22, 33] },
  { type: 'tamping machine', share: 0.04, speedMs: [17, 25] },
];

/**
 * A compressed timetable. Trains meet on passing loops between the bridges, never on one; trains of one direction keep
 * their order; and each bridge is clear for a while between two passages. The same seed gives the same timetable,
 * however it is asked for.
 */
export function createTraffic(options: TrafficOptions): LineTraffic {
  const { seed, startMicros, headwayS = USUAL_HEADWAY_S } = options;
  const random = new RandomStream(seed, 'traffic');
  const bridges = options.bridges.toSorted((a, b) => a.chainageKm - b.chainageKm);
  const middleKm = bridges.reduce((sum, { chainageKm }) => sum + chainageKm, 0) / Math.max(1, bridges.length);
  const planned: LineTrain[] = [];
  let count = 0;
  const create = (wish: Omit<FixedTrain, 'bridge' | 'onMicros'>, middleMicros: number): LineTrain => {
    const { type, direction, speedMs } = wish;
    // trains repeat after some hundred, so that a truth stays small
    const train = createTrain(type, seed * 1000 + (count % 500));
    return {
      train,
      direction,
      speedMs,
      passages: passagesOf(bridges, train, direction, speedMs, middleKm, middleMicros),
    };
  };

  const fixed = (options.fixed ?? []).map((wish) => {
    const bridge = bridges.find(({ id }) => id === wish.bridge);
    if (bridge === undefined) throw new RangeError(`no bridge ${wish.bridge} on the line`);
    count++;
    return create(wish, wish.onMicros - wayS(bridge, wish.direction, middleKm, wish.speedMs) * MICROS_PER_SECOND);
  });
  planned.push(...fixed);
  let given = 0;
  // Trains that are half-way along the line at the beginning left before it.
  let next = startMicros - LONGEST_WAY_S * MICROS_PER_SECOND;

  const plan = (): void => {
    const mix = drawMix(random);
    const direction = random.chance(0.5) ? 'rising' : 'falling';
    const speedMs = Math.round(random.uniform(...mix.speedMs) * 100) / 100;
    next += Math.round(random.uniform(headwayS.least, headwayS.most) * MICROS_PER_SECOND);
    count++;
    for (let lateS = 0; lateS <= LATEST_S; lateS += 3) {
      const middleMicros = next + lateS * MICROS_PER_SECOND;
      const candidate = create({ type: mix.type, direction, speedMs }, middleMicros);
      if (planned.every((other) => agree(other, candidate, bridges))) {
        planned.push(candidate);
        next = middleMicros;
        return;
      }
    }
  };

  return {
    until(micros) {
      while (next < micros + LONGEST_WAY_S * MICROS_PER_SECOND) plan();
      const fresh = planned.slice(given);
      // What is long past disturbs nobody any more.
      const old = next - 4 * LONGEST_WAY_S * MICROS_PER_SECOND;
      const kept = planned.filter(({ passages }) => passages.some(({ event }) => event.onMicros > old));
      planned.splice(0, planned.length, ...kept);
      given = planned.length;
      return fresh.filter(({ passages }) => passages.some(({ event }) => event.onMicros >= startMicros));
    },
  };
}

function drawMix(random: RandomStream): (typeof MIX)[number] {
  let draw = random.uniform(0, 1);
  for (const mix of MIX) {
    draw -= mix.share;
    if (draw < 0) return mix;
  }
  return MIX[0]!;
}

/** Time from the middle of the line to the first bearing of a bridge in running direction, s; negative before it. */
function wayS(bridge: BridgeDefinition, direction: 'rising' | 'falling', middleKm: number, speedMs: number): number {
  const sign = direction === 'rising' ? 1 : -1;
  const toMiddleM = (bridge.chainageKm - middleKm) * 1000 * sign;
  return (toMiddleM - bridgeLengthM(bridge) / 2) / speedMs;
}

function passagesOf(
  bridges: readonly BridgeDefinition[],
  train: Train,
  direction: 'rising' | 'falling',
  speedMs: number,
  middleKm: number,
  middleMicros: number,
): LineTrain['passages'] {
  const passages = bridges.map((bridge) => {
    const onMicros = Math.round(middleMicros + wayS(bridge, direction, middleKm, speedMs) * MICROS_PER_SECOND);
    return { bridge: bridge.id, event: { kind: 'passage' as const, train, onMicros, speedMs, direction } };
  });
  return passages.sort((a, b) => a.event.onMicros - b.event.onMicros);
}

/** Whether two trains can both run: apart on each bridge, and in the same order on all where they run the same way. */
function agree(a: LineTrain, b: LineTrain, bridges: readonly BridgeDefinition[]): boolean {
  let order = 0;
  for (const bridge of bridges) {
    const one = a.passages.find((passage) => passage.bridge === bridge.id)!.event;
    const other = b.passages.find((passage) => passage.bridge === bridge.id)!.event;
    const [first, second] = one.onMicros <= other.onMicros ? [one, other] : [other, one];
    if (offMicros(first, bridgeLengthM(bridge)) + CLEAR_S * MICROS_PER_SECOND > second.onMicros) return false;
    const sign = first === one ? 1 : -1;
    if (a.direction === b.direction && order === -sign) return false;
    order = sign;
  }
  return true;
}
