import type { Passage } from '#core/contract/passage.ts';
import { simulate } from '../../simulator/scene.ts';
import { campaignScene } from '../../simulator/campaign.ts';
import { occupations, type Occupation, type PassageTruth } from '../../simulator/truth.ts';
import { blocksOf, runPipeline } from '../support/scenes.ts';

/** What the pipeline made of one scene of the campaign. */
export interface SceneVerdict {
  index: number;
  label: string;
  gauges: boolean;
  /** Trains that truly crossed, and stretches of time with any of them on the bridge. */
  trains: number;
  occupations: number;
  missed: number;
  invented: number;
  /** Of each found passage, recorded less true, s. */
  onErrors: number[];
  offErrors: number[];
  /** Of passages of one train that did not stop: relative error of speed, the same in its stated standard errors; difference of axle count. */
  speedErrors: number[];
  speedSigmas: number[];
  axleErrors: number[];
}

/** Simulates a scene, runs it through the pipeline and compares with the truth. */
export function judgeScene(index: number, seed: number): SceneVerdict {
  const scene = campaignScene(index, seed);
  const { channels, truths } = simulate(scene);
  const broken = channels.find(({ samples }) => !samples.every(Number.isFinite));
  if (broken !== undefined) throw new Error(`${scene.label}: ${broken.sensor} is not simulated to its end`);
  const output = runPipeline(scene.definition, blocksOf(scene.definition.id, channels));
  // A level that was passed without a train is recorded too, and claims none.
  const found = output.passages.map(({ passage }) => passage).filter(({ phases }) => phases.foundBy !== 'live level');
  const truly = occupations(truths);
  const verdict: SceneVerdict = {
    index,
    label: scene.label,
    gauges: scene.gauges,
    trains: truths.length,
    occupations: truly.length,
    missed: 0,
    invented: 0,
    onErrors: [],
    offErrors: [],
    speedErrors: [],
    speedSigmas: [],
    axleErrors: [],
  };
  const free = new Set(found);
  for (const occupation of truly) {
    const match = found.find((passage) => free.has(passage) && overlaps(passage, occupation));
    if (match === undefined) {
      verdict.missed += 1;
      continue;
    }
    free.delete(match);
    compare(verdict, match, occupation, truths);
  }
  verdict.invented = free.size;
  return verdict;
}

function overlaps(passage: Passage, { onMicros, offMicros }: Occupation): boolean {
  return passage.phases.onMicros < offMicros && passage.phases.offMicros > onMicros;
}

function compare(
  verdict: SceneVerdict,
  passage: Passage,
  occupation: Occupation,
  truths: readonly PassageTruth[],
): void {
  verdict.onErrors.push((passage.phases.onMicros - occupation.onMicros) / 1e6);
  verdict.offErrors.push((passage.phases.offMicros - occupation.offMicros) / 1e6);
  const [train, other] = occupation.trains.map((index) => truths[index]);
  if (train === undefined || other !== undefined || train.stopped) return;
  const { speedMs } = passage;
  if (speedMs.value !== null) {
    verdict.speedErrors.push(speedMs.value / train.speedMs - 1);
    verdict.speedSigmas.push((speedMs.value - train.speedMs) / (speedMs.standardError ?? Infinity));
  }
  if (passage.axleCount.value !== null) verdict.axleErrors.push(passage.axleCount.value - train.train.axles.length);
}
