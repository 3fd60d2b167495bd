import type { Day } from '#core/contract/api.ts';
import type { Passage } from '#core/contract/passage.ts';

type Mark = Day['marks'][number];

/** A day as the history tells it, with the passages that have come since it was asked. */
export function withPassages(day: Day, passages: readonly Passage[]): Day {
  const known = new Set(day.marks.map(({ id }) => id));
  const fresh = passages
    .map(markOf)
    .filter(({ id, micros }) => !known.has(id) && micros >= day.startMicros && micros < day.endMicros);
  if (fresh.length === 0) return day;
  const marks = [...day.marks, ...fresh].sort((a, b) => a.micros - b.micros);
  const above = { ...day.above };
  for (const { severity } of fresh) if (severity) above[severity] += 1;
  const peaks = marks.flatMap(({ peak }) => (peak === null ? [] : [peak]));
  return {
    ...day,
    marks,
    above,
    passages: day.passages + fresh.length,
    highest: peaks.length === 0 ? null : Math.max(...peaks),
  };
}

const markOf = (passage: Passage): Mark => ({
  id: passage.id,
  micros: passage.phases.onMicros,
  peak: passage.peak.measured.value,
  ofGravest: passage.peak.ofGravest,
  severity: passage.peak.severity,
});
