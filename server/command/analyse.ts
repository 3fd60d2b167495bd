import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { SampleBlock } from '#core/contract/block.ts';
import type { Micros } from '#core/contract/time.ts';
import { createPipeline, finish, measureWhole, recompute, step } from '#core/passage/pipeline.ts';
import { readDefinition } from '../definition.ts';
import { openRecording } from '../exchange/opening.ts';
import { joinRecordings, type Recording } from '../exchange/recording.ts';
import { definitionFile } from './definition-file.ts';
import { complain, complainOf, EXIT, type Console } from './outcome.ts';
import { tableHeader, tableRow, timeText } from './passage-table.ts';
import { gatherWhole } from './whole.ts';

export interface AnalyseSettings {
  /** Definition file, or id of a bridge of the demonstration. */
  bridge: string;
  /** Take the whole recording as one event. */
  whole: boolean;
  format: 'jsonl' | 'table';
  /** Time of zero where the recording counts from there. */
  startMicros: Micros | null;
  /** Version that the passages name; where null, 1, or that of a stored passage. */
  definitionVersion: number | null;
}

/**
 * `analyse RECORDING…`: runs the pipeline of the live server over recordings and prints the passages.
 *
 * @returns exit code
 */
export async function analyse(files: readonly string[], settings: AnalyseSettings, console: Console): Promise<number> {
  const reading = await readDefinition(definitionFile(settings.bridge));
  if (!reading.ok) return complain(reading.complaints, console);
  const given = reading.value.definition;
  const recordings: Recording[] = [];
  try {
    for (const file of files) recordings.push(await openRecording(file, given, settings));
    const count = await print(analysed(recordings, given, settings), given, settings.format, console);
    if (count === 0) console.err('note: no passage was found; --whole measures the recording as one event\n');
  } catch (error) {
    return complainOf(error, console);
  } finally {
    for (const note of recordings.flatMap(({ notes }) => notes)) console.err(`note: ${note}\n`);
  }
  return EXIT.good;
}

/** Stored passages one by one, everything else as one recording. */
async function* analysed(
  recordings: readonly Recording[],
  given: BridgeDefinition,
  { whole, definitionVersion }: AnalyseSettings,
): AsyncGenerator<Passage> {
  const streams: Recording[] = [];
  for (const recording of recordings) {
    if (whole || recording.passage === null) streams.push(recording);
    else yield* again(recording, recording.passage, given, definitionVersion);
  }
  if (streams.length === 0) return;
  const { definition, blocks } = joinRecordings(streams, given);
  if (whole) yield* wholeEvent(definition, blocks, definitionVersion ?? 1);
  else yield* passages(definition, blocks, definitionVersion ?? 1);
}

async function* passages(
  definition: BridgeDefinition,
  blocks: AsyncIterable<SampleBlock>,
  version: number,
): AsyncGenerator<Passage> {
  const state = createPipeline(definition, version);
  for await (const block of blocks) for (const { passage } of step(state, block).passages) yield passage;
  for (const { passage } of finish(state).passages) yield passage;
}

async function* wholeEvent(
  definition: BridgeDefinition,
  blocks: AsyncIterable<SampleBlock>,
  version: number,
): AsyncGenerator<Passage> {
  const found = measureWhole(definition, version, await gatherWhole(definition, blocks));
  if (found !== null) yield found.passage;
}

/**
 * A stored passage from its wave form: measured in the window it was found in, so that the same definition gives the
 * same bits. Looking for trains in so short a piece would find the window anew, a tenth of a second off perhaps.
 */
async function* again(
  recording: Recording,
  stored: Passage,
  given: BridgeDefinition,
  version: number | null,
): AsyncGenerator<Passage> {
  const { definition, blocks } = joinRecordings([recording], given);
  const channels = await gatherWhole(definition, blocks);
  const passage = recompute(definition, version ?? stored.provenance.definitionVersion, stored, channels);
  if (passage !== null) yield passage;
}

async function print(
  found: AsyncIterable<Passage>,
  given: BridgeDefinition,
  format: AnalyseSettings['format'],
  console: Console,
): Promise<number> {
  let count = 0;
  for await (const passage of found) {
    if (format === 'table' && count === 0) await console.out(tableHeader());
    await console.out(format === 'table' ? tableRow(passage) : `${JSON.stringify(passage)}\n`);
    if (passage.phases.foundBy === 'live level') console.err(`note: ${withoutTrain(passage, given)}\n`);
    count++;
  }
  return count;
}

/** A level was passed and no train was recognised: when, on which sensor, how far, and what to do. */
function withoutTrain({ id, peak, channels }: Passage, { limits }: BridgeDefinition): string {
  const { measured, sensor, micros, limit, severity } = peak;
  const what = 'no train was recognised, but the deck passed a level';
  const more = '--whole measures the recording as one event';
  if (severity === null || micros === null || measured.value === null) {
    return `${id}: ${what} in the live signal; the record stays below; ${more}`;
  }
  const level = limits.find((one) => one.id === limit)?.levels[severity];
  const others = channels
    .filter((channel) => channel.sensor !== sensor && channel.limits.some((said) => said.severity !== null))
    .map((channel) => channel.sensor);
  const also = others.length === 0 ? '' : `; ${others.join(', ')} too`;
  const value = `${measured.value.toFixed(2)} m/s² on ${sensor} at ${timeText(micros)} UTC`;
  return `${id}: ${what}: ${value}, above ${severity} of limit ${limit} (${level} m/s²)${also}; ${more}`;
}
