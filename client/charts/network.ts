import type { Day } from '#core/contract/api.ts';
import { SEVERITIES } from '#core/contract/severity.ts';
import type { BridgeStatus } from '#core/contract/status.ts';
import type { AlarmCounts } from '../state.svelte.ts';

/** A bridge as the network shows it. */
export interface NetworkBridge {
  status: BridgeStatus;
  unanswered: AlarmCounts;
  /** Null until it is known. */
  today: Day | null;
  trouble: string | null;
}

export interface Line {
  name: string;
  fromKm: number;
  toKm: number;
  /** By chainage. */
  bridges: NetworkBridge[];
}

/** Loss of monitoring, grave to none. */
const DARKNESS: Readonly<Record<BridgeStatus['monitoring'], number>> = {
  'bad definition': 4,
  'no data': 3,
  'no data yet': 2,
  'partly measuring': 1,
  measuring: 0,
};

/** Of today's passages, the peak that came nearest to its gravest limit or went farthest beyond it, as their ratio. */
export function highestRatio({ today }: Pick<NetworkBridge, 'today'>): number | null {
  const ratios = (today?.marks ?? []).flatMap(({ ofGravest }) => (ofGravest === null ? [] : [ofGravest]));
  return ratios.length === 0 ? null : Math.max(...ratios);
}

/**
 * Worst first: by the number of unanswered alarms, gravest level first; then by loss of monitoring; then by today's
 * highest peak over its limit; then by chainage.
 */
export function inWorstOrder(bridges: readonly NetworkBridge[]): NetworkBridge[] {
  return bridges.toSorted((a, b) => {
    for (const severity of SEVERITIES.toReversed()) {
      const more = b.unanswered[severity] - a.unanswered[severity];
      if (more !== 0) return more;
    }
    const darker = DARKNESS[b.status.monitoring] - DARKNESS[a.status.monitoring];
    if (darker !== 0) return darker;
    const higher = (highestRatio(b) ?? -1) - (highestRatio(a) ?? -1);
    return higher !== 0 ? higher : a.status.chainageKm - b.status.chainageKm;
  });
}

/** Bridges by line, each line from a round chainage before its first bridge to one after its last. */
export function linesOf(bridges: readonly NetworkBridge[]): Line[] {
  const byName = new Map<string, NetworkBridge[]>();
  for (const bridge of bridges) {
    const line = byName.get(bridge.status.line) ?? [];
    line.push(bridge);
    byName.set(bridge.status.line, line);
  }
  return [...byName].map(([name, of]) => {
    const sorted = of.toSorted((a, b) => a.status.chainageKm - b.status.chainageKm);
    const first = sorted[0]!.status.chainageKm;
    const last = sorted[sorted.length - 1]!.status.chainageKm;
    const margin = Math.max(0.4, (last - first) * 0.09);
    const step = margin > 5 ? 5 : margin > 1 ? 1 : 0.5;
    return {
      name,
      bridges: sorted,
      fromKm: Math.floor((first - margin) / step) * step,
      toKm: Math.ceil((last + margin) / step) * step,
    };
  });
}
