import type { PassageView } from '#core/contract/api.ts';
import { bridgeLengthM, chainageKmAt, type BridgeDefinition } from '#core/contract/bridge.ts';
import { isLowerBound } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import { LIMIT_NAMES } from './alarm-words.ts';
import { axlesText } from './figure.ts';
import { chainage, fixed, speed } from '../format.ts';
import { clockIn, dateIn, minuteIn, offsetIn } from '../time.ts';

/** Whether a train was recognised, or only a level passed. */
export function isTrain({ phases }: Passage): boolean {
  return phases.foundBy !== 'live level';
}

/** What its first part is called, and what its time counts from. */
export function forcedWords(passage: Passage): { part: string; zero: string } {
  return isTrain(passage)
    ? { part: 'forced vibration', zero: 'the first axle reaches the bridge' }
    : { part: 'above a level', zero: 'a level was passed' };
}

/** What crossed, as a title: `32 axles, 44.3 m/s`. */
export function titleOf(passage: Passage): string {
  if (!isTrain(passage)) return 'A level passed, no train recognised';
  const fast = passage.speedMs.value;
  const train = axlesText(passage.axleCount) ?? 'Train, axles not counted';
  return `${train}, ${fast === null ? 'speed not measurable' : `${speed(fast)} m/s`}`;
}

/** `towards km 41.331`: the end of the bridge that the train went to. */
export function towards(passage: Passage, definition: BridgeDefinition): string {
  if (passage.direction === null) return 'direction not measurable';
  const end = passage.direction === 'rising' ? bridgeLengthM(definition) : 0;
  return `towards km ${chainage(chainageKmAt(definition, end))}`;
}

/** `Tue 4 Nov 2025, 07:46:12 local (UTC+1), 06:46:12 UTC` */
export function timeOf(passage: Passage, zone: string): string {
  const at = passage.phases.onMicros;
  if (zone === 'UTC') return `${dateIn(at)}, ${clockIn(at)} UTC`;
  return `${dateIn(at, zone)}, ${clockIn(at, zone)} local (${offsetIn(at, zone)}), ${clockIn(at)} UTC`;
}

/** The passage against its limits in one sentence. */
export function verdictOf(passage: Passage): string {
  const { measured, severity, limit } = passage.peak;
  if (measured.value === null) return `Peak deck acceleration not measurable: ${measured.reason}`;
  if (severity !== null) return `Above the ${LIMIT_NAMES[severity]}`;
  if (isLowerBound(measured)) return 'Not known to be below the limits: the peak is a lower bound';
  return passage.peak.ofGravest === null && limit === null ? 'No limit holds here' : 'Below all limits';
}

/** The low-pass that the limits look through, as it was realised. */
export function filterWords({ filter }: Passage['provenance']): string {
  return `${filter.kind}, order ${filter.order}, ${filter.phase}; up to ${fixed(filter.upToHz, 1)} Hz, set by ${filter.rule}`;
}

export function phaseWords({ phases }: Passage): string {
  const quality = phases.quality === 'good' ? '' : `, ${phases.quality}`;
  const notes = phases.notes.length > 0 ? `: ${phases.notes.join('; ')}` : '';
  return `found by ${phases.foundBy}${quality}${notes}`;
}

/** `400 Hz`, or all rates where they differ. */
export function rateWords(passage: Passage): string {
  const rates = [...new Set(passage.channels.map(({ rateHz }) => rateHz))].toSorted((a, b) => b - a);
  return rates.map((rate) => `${fixed(rate, Number.isInteger(rate) ? 0 : 2)} Hz`).join(', ');
}

/** `an earlier passage` or `a later passage`, seen from `here`. */
export function orderWords(here: Passage, other: Passage): string {
  return other.phases.onMicros <= here.phases.onMicros ? 'an earlier passage' : 'a later passage';
}

/** A passage among others, in one line: `4 Nov 2025, 07:46; 32 axles, 44.3 m/s`. */
export function shortWords(passage: Passage, zone: string): string {
  const at = passage.phases.onMicros;
  return `${dateIn(at, zone).replace(/^\w+ /, '')}, ${minuteIn(at, zone)}; ${titleOf(passage)}`;
}

/** What makes two passages unlike, so that their difference need not be the bridge's; empty where they are alike. */
export function unlikeWords(here: PassageView, other: PassageView): string[] {
  const [a, b] = [here.passage, other.passage];
  const directions = [a.direction, b.direction].every((direction) => direction !== null);
  const known = a.axleCount.value !== null && b.axleCount.value !== null;
  return [
    ...(a.bridge === b.bridge ? [] : [`it crossed another bridge, ${other.definition.name}`]),
    ...(directions && a.direction !== b.direction ? ['it went the other way'] : []),
    ...(known && a.axleCount.value !== b.axleCount.value ? ['it had another number of axles'] : []),
    ...(known && a.axleCount.value === b.axleCount.value && !sameAxles(a, b)
      ? ['its axles stood at other distances']
      : []),
    ...(isTrain(a) && isTrain(b) ? [] : ['not both were recognised as trains']),
    ...(a.provenance.definitionVersion === b.provenance.definitionVersion || a.bridge !== b.bridge
      ? []
      : [`it was computed with definition ${b.provenance.definitionVersion}`]),
    ...(a.provenance.ruleVersion === b.provenance.ruleVersion
      ? []
      : [`it was computed with rules ${b.provenance.ruleVersion}`]),
  ];
}

/** Distances are as good as the speed, some per mille, and half a metre at worst for one axle. */
function sameAxles(a: Passage, b: Passage): boolean {
  return a.axles.every(({ behindFirstM: at }, i) => Math.abs(at - (b.axles[i]?.behindFirstM ?? at)) < 0.5 + 0.01 * at);
}
