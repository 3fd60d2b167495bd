import { describe, expect, it } from 'vitest';
import type { BridgeStatus } from '#core/contract/status.ts';
import { inWorstOrder, linesOf, type NetworkBridge } from '../../../client/charts/network.ts';

function bridge(
  id: string,
  chainageKm: number,
  change: Partial<NetworkBridge> & { monitoring?: BridgeStatus['monitoring'] } = {},
): NetworkBridge {
  const { monitoring = 'measuring', ...rest } = change;
  return {
    status: {
      id,
      name: id,
      line: 'Ottermere to Sallow',
      chainageKm,
      monitoring,
      channels: 8,
      channelsAlive: 8,
      newestMicros: null,
      passageInProgress: null,
      lastPassage: null,
      unacknowledged: { AL: 0, IL: 0, IAL: 0 },
      complaint: null,
    },
    unanswered: { AL: 0, IL: 0, IAL: 0 },
    today: null,
    trouble: null,
    ...rest,
  };
}

const withPeak = (ofGravest: number): Partial<NetworkBridge> => ({
  today: {
    day: '2026-12-01',
    startMicros: 0,
    endMicros: 1,
    passages: 1,
    highest: 1,
    above: { AL: 0, IL: 0, IAL: 0 },
    marks: [{ id: 'x', micros: 0, peak: 1, ofGravest, severity: null }],
    noData: [],
  },
});

describe('the network', () => {
  it('puts one graver alarm before many milder ones, alarms before darkness, darkness before peaks', () => {
    const all = [
      bridge('well', 1),
      bridge('shaken', 2, withPeak(0.9)),
      bridge('dark', 3, { monitoring: 'no data' }),
      bridge('many', 4, { unanswered: { AL: 9, IL: 0, IAL: 0 } }),
      bridge('grave', 5, { unanswered: { AL: 0, IL: 0, IAL: 1 } }),
      bridge('partly', 6, { monitoring: 'partly measuring' }),
    ];
    expect(inWorstOrder(all).map(({ status }) => status.id)).toEqual([
      'grave',
      'many',
      'dark',
      'partly',
      'shaken',
      'well',
    ]);
  });

  it('keeps the order of chainage where nothing is worse', () => {
    expect(inWorstOrder([bridge('b', 2), bridge('a', 1)]).map(({ status }) => status.id)).toEqual(['a', 'b']);
  });

  it('draws each line with all of its bridges inside', () => {
    const [line] = linesOf([bridge('b', 47.11), bridge('a', 41.32)]);
    expect(line?.bridges.map(({ status }) => status.id)).toEqual(['a', 'b']);
    expect(line!.fromKm).toBeLessThan(41.32);
    expect(line!.toKm).toBeGreaterThan(47.11);
  });

  it('draws a line of one bridge too', () => {
    const [line] = linesOf([bridge('a', 41.32)]);
    expect(line!.toKm).toBeGreaterThan(line!.fromKm);
  });
});
