import { readFileSync } from 'node:fs';
import { describe, expect, it } from 'vitest';
import { bridgeLengthM, type BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { DEMONSTRATION_FILES } from '../../simulator/demonstration.ts';
import { offMicros, type PassageEvent } from '../../simulator/passage.ts';
import { createTraffic, type LineTrain, type TrafficOptions } from '../../simulator/traffic.ts';
import { decodeDefinition } from '../../server/definition.ts';
import { DAWN } from '../support/specimen.ts';

const LINE: BridgeDefinition[] = DEMONSTRATION_FILES.map((url) => {
  const reading = decodeDefinition(readFileSync(url, 'utf8'), url.pathname);
  if (!reading.ok) throw new Error(JSON.stringify(reading.complaints));
  return reading.value.definition;
});

const HOUR: Micros = 3600 * MICROS_PER_SECOND;
const SEED = 20_261_201;

function trains(stepS: number, over: Partial<TrafficOptions> = {}): LineTrain[] {
  const traffic = createTraffic({ bridges: LINE, startMicros: DAWN, seed: SEED, ...over });
  const found: LineTrain[] = [];
  for (let micros = DAWN; micros <= DAWN + HOUR; micros += stepS * MICROS_PER_SECOND)
    found.push(...traffic.until(micros));
  return found;
}

function passagesOf(found: readonly LineTrain[], bridge: string): PassageEvent[] {
  return found
    .flatMap(({ passages }) => passages.filter((passage) => passage.bridge === bridge))
    .map(({ event }) => event)
    .filter(({ onMicros }) => onMicros >= DAWN && onMicros < DAWN + HOUR)
    .sort((a, b) => a.onMicros - b.onMicros);
}

describe('the traffic of the line', () => {
  it('takes each train over all bridges in order of chainage, each after the way from the last at its speed', () => {
    for (const { direction, speedMs, passages } of trains(60)) {
      expect(passages.map(({ bridge }) => bridge)).toEqual(
        direction === 'rising' ? ['ottermere', 'fennick', 'sallow'] : ['sallow', 'fennick', 'ottermere'],
      );
      for (const [index, { bridge, event }] of passages.entries()) {
        const before = passages[index - 1];
        if (before === undefined) continue;
        const [from, to] = [before.bridge, bridge].map((id) => LINE.find((each) => each.id === id)!);
        // from first bearing to first bearing in running direction
        const wayM =
          Math.abs(to!.chainageKm - from!.chainageKm) * 1000 + (bridgeLengthM(from!) - bridgeLengthM(to!)) / 2;
        expect((event.onMicros - before.event.onMicros) / 1e6).toBeCloseTo(wayM / speedMs, 5);
      }
    }
  });

  it('keeps 18 s between two trains on a bridge, whichever way they go', () => {
    const found = trains(60);
    for (const bridge of LINE) {
      const events = passagesOf(found, bridge.id);
      const clear = events.slice(1).map((event, i) => event.onMicros - offMicros(events[i]!, bridgeLengthM(bridge)));
      expect(Math.min(...clear)).toBeGreaterThanOrEqual(18 * MICROS_PER_SECOND);
    }
  });

  it('lets no train pass another of its direction', () => {
    const found = trains(60);
    for (const direction of ['rising', 'falling'] as const) {
      const orders = LINE.map(({ id }) =>
        found
          .filter((train) => train.direction === direction)
          .map((train, number) => ({ number, on: train.passages.find(({ bridge }) => bridge === id)!.event.onMicros }))
          .sort((a, b) => a.on - b.on)
          .map(({ number }) => number),
      );
      expect(orders[1]).toEqual(orders[0]);
      expect(orders[2]).toEqual(orders[0]);
    }
  });

  it('runs a train about every 40 s over each bridge, of all types and both ways', () => {
    const found = trains(60);
    for (const { id } of LINE) {
      const events = passagesOf(found, id);
      expect(events.length).toBeGreaterThan(60);
      expect(events.length).toBeLessThan(140);
    }
    expect(new Set(found.map(({ train }) => train.type)).size).toBe(5);
    expect(new Set(found.map(({ direction }) => direction)).size).toBe(2);
  });

  it('is the same however it is asked for', () => {
    expect(trains(7)).toEqual(trains(600));
  });

  it('is another for another seed', () => {
    expect(passagesOf(trains(60, { seed: SEED + 1 }), 'fennick')).not.toEqual(passagesOf(trains(60), 'fennick'));
  });

  it('runs the trains that are fixed when they are due', () => {
    const onMicros = DAWN + 40 * MICROS_PER_SECOND;
    const fixed = [
      { type: 'intercity' as const, direction: 'rising' as const, speedMs: 44.4, bridge: 'ottermere', onMicros },
    ];
    const event = passagesOf(trains(60, { fixed }), 'ottermere').find((each) => each.onMicros === onMicros);
    expect(event).toMatchObject({ speedMs: 44.4, direction: 'rising', train: { type: 'intercity' } });
  });

  it('gives every passage before it begins', () => {
    const traffic = createTraffic({ bridges: LINE, startMicros: DAWN, seed: SEED });
    for (let micros = DAWN; micros < DAWN + HOUR; micros += 30 * MICROS_PER_SECOND) {
      const events = traffic.until(micros).flatMap(({ passages }) => passages.map(({ event }) => event));
      // those before the last question belong to trains that were under way when the traffic began
      const late = events.filter(({ onMicros }) => onMicros < micros - 30 * MICROS_PER_SECOND && onMicros >= DAWN);
      expect(late).toEqual([]);
    }
  });
});
