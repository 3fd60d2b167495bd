import { isDeckAcceleration, type BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import { zeroPhase, zeroPhaseLowpass } from '#core/signal/zero-phase.ts';
import { filterRuns, type Wave } from './wave.ts';

/** Band edge over rate up to which the record's filter is applied. */
const GREATEST_OF_RATE = 0.45;

/**
 * What the limits speak of: deck accelerations without their offset, through the passage's own low-pass, both ways
 * over each unbroken run. Other sensors are left as they are.
 */
export function bandLimited(
  waves: ReadonlyMap<string, Wave>,
  definition: BridgeDefinition,
  passage: Passage,
): Map<string, Wave> {
  const { order, upToHz } = passage.provenance.filter;
  return new Map(
    [...waves].map(([id, wave]) => {
      const sensor = definition.sensors.find((candidate) => candidate.id === id);
      if (!sensor || !isDeckAcceleration(sensor)) return [id, wave];
      const offset = passage.channels.find((channel) => channel.sensor === id)?.offset.value ?? 0;
      // The record, too, is left as it is where its rate is too low for the filter.
      const sections = upToHz <= GREATEST_OF_RATE * wave.rateHz ? zeroPhaseLowpass(order, upToHz, wave.rateHz) : null;
      const filtered = filterRuns(wave, 3, (run) => {
        for (let i = 0; i < run.length; i++) run[i]! -= offset;
        return sections ? zeroPhase(sections, run) : run;
      });
      return [id, filtered];
    }),
  );
}
