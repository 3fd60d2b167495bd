import type { Recomputed } from '#core/contract/api.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { accept, refuse, type Result } from '#core/contract/errors.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { recompute } from '#core/passage/pipeline.ts';

/** Differences that are listed; the passage itself is given whole. */
const LIMIT_DIFFERENCES = 100;

/** A stored passage held against what its own wave form gives now. */
export function recomputedOf(
  definition: BridgeDefinition,
  stored: Passage,
  channels: readonly WindowChannel[],
): Result<Recomputed> {
  const passage = recompute(definition, stored.provenance.definitionVersion, stored, channels);
  if (passage === null) return refuse('NOT_FOUND', 'its wave form holds no train by the rules of today', stored.id);
  const differences = differencesOf('', stored, passage);
  return accept({ same: differences.length === 0, differences: differences.slice(0, LIMIT_DIFFERENCES), passage });
}

/** Leaves that differ, by path. Numbers are the same only to the last bit. */
export function differencesOf(path: string, stored: unknown, now: unknown): Recomputed['differences'] {
  if (Object.is(stored, now)) return [];
  if (isTree(stored) && isTree(now) && Array.isArray(stored) === Array.isArray(now)) {
    const keys = new Set([...Object.keys(stored), ...Object.keys(now)]);
    return [...keys].flatMap((key) => differencesOf(path === '' ? key : `${path}.${key}`, stored[key], now[key]));
  }
  // A stored passage has been JSON: no undefined, and no negative zero.
  if (stored === 0 && now === 0) return [];
  return [{ field: path, stored: told(stored), recomputed: told(now) }];
}

const isTree = (value: unknown): value is Record<string, unknown> => typeof value === 'object' && value !== null;

const told = (value: unknown): string => (value === undefined ? 'absent' : JSON.stringify(value));
