import { bridgeLengthM, type BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { SceneEvent } from './nuisance.ts';
import type { BridgeParameters } from './parameters.ts';
import { offMicros } from './passage.ts';
import { createBridgeSimulation, type SimulatedChannel } from './simulation.ts';
import { PEAK_TAIL_S, type PassageTruth } from './truth.ts';

/** A stretch of time on one bridge, with all that happens in it. Plain data. */
export interface Scene {
  definition: BridgeDefinition;
  parameters: BridgeParameters;
  seed: number;
  fromMicros: Micros;
  toMicros: Micros;
  events: readonly SceneEvent[];
}

export interface SimulatedScene {
  channels: SimulatedChannel[];
  /** Of all its passages, in order of leaving. */
  truths: PassageTruth[];
}

/** Simulate a scene in one go. */
export function simulate(scene: Scene, options: { keepClean?: boolean } = {}): SimulatedScene {
  const { definition, parameters, seed, fromMicros, toMicros } = scene;
  const simulation = createBridgeSimulation({ definition, parameters, seed, startMicros: fromMicros, ...options });
  for (const event of scene.events) simulation.schedule(event);
  const channels = simulation.advance(toMicros);
  // a train may still be on the bridge, or its decay in progress, when the scene ends
  const lengthM = bridgeLengthM(definition);
  const offs = scene.events.map((event) => (event.kind === 'passage' ? offMicros(event, lengthM) : 0));
  const settled = Math.max(...offs, 0) + (PEAK_TAIL_S + 1) * MICROS_PER_SECOND;
  if (settled > toMicros) simulation.advance(settled);
  return { channels, truths: simulation.takeTruths() };
}
