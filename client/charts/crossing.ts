import type { LinkState } from '../link.ts';
import type { BridgeStatus } from '#core/contract/status.ts';
import type { ServerMessage } from '#core/contract/live.ts';
import type { Micros } from '#core/contract/time.ts';
import { plural } from '../format.ts';

/** The passage that the server told of last: from its beginning to its record. */
export interface Crossing {
  passage: string;
  enteredMicros: Micros;
  /** Null while the train is on the bridge. */
  leftMicros: Micros | null;
}

type Progress = Pick<Extract<ServerMessage, { type: 'progress' }>, 'passage' | 'kind' | 'micros'>;

/** What a message of its progress makes of the crossing; null where there is none any more. */
export function nextCrossing(before: Crossing | null, { passage, kind, micros }: Progress): Crossing | null {
  if (kind === 'entered') return { passage, enteredMicros: micros, leftMicros: null };
  if (before?.passage !== passage) return before;
  return kind === 'left' ? { ...before, leftMicros: micros } : null;
}

/** What is drawn of the train, and what is known of the bridge. */
export interface Sight {
  link: LinkState['kind'];
  monitoring: BridgeStatus['monitoring'] | null;
  /** The server's word that a passage is on the bridge. */
  passageInProgress: string | null;
  crossing: Crossing | null;
  /** The newest passage that has its record. */
  recorded: string | null;
  axles: number;
  onBridge: number;
}

/**
 * Whether a train is on the bridge, in words. Without samples nothing is said of it, whatever was said last; a train that
 * has left is no passage in progress, but has no record before the bridge has come to rest.
 */
export function crossingWords(sight: Sight): string {
  const { monitoring, crossing, axles, onBridge } = sight;
  if (sight.link !== 'live') return 'Not live';
  if (monitoring !== 'measuring' && monitoring !== 'partly measuring') {
    return 'Not known whether a train is on the bridge';
  }
  const left = crossing !== null && crossing.leftMicros !== null;
  if (axles > 0 && (onBridge > 0 || !left)) {
    const on = onBridge === 0 ? 'none on the bridge' : `${onBridge} on the bridge`;
    return `Passage in progress: ${plural(axles, 'axle')} entered, ${on}`;
  }
  if (left && crossing.passage !== sight.recorded) return 'The train has left; its record waits for the free decay';
  if (!left && (crossing !== null || sight.passageInProgress !== null)) return 'Passage in progress';
  return monitoring === 'measuring' ? 'No train on the bridge' : 'No train seen; not all channels give data';
}
