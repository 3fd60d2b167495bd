import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { SampleBlock } from '#core/contract/block.ts';
import type { Micros } from '#core/contract/time.ts';
import { createPipeline, finish, measureWhole, step } from '#core/passage/pipeline.ts';
import { readDefinition } from '../definition.ts';
import { joinRecordings, openRecording, type Recording } from '../exchange/recording.ts';
import { definitionFile } from './definition-file.ts';
import { complain, complainOf, EXIT, type Console } from './outcome.ts';
import { tableHeader, tableRow } from './passage-table.ts';
import { gatherWhole } from './whole.ts';

export interface AnalyseSettings {
  /** Definition file, or id of a bridge of the demonstration. */
  bridge: string;
  /** Take the whole recording as one event. */
  whole: boolean;
  format: 'jsonl' | 'table';
  /** Time of zero where the recording counts from there. */
  startMicros: Micros | null;
  /** Version that the passages name. */
  definitionVersion: number;
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
    const { definition, blocks } = joinRecordings(recordings, given);
    const found = settings.whole ? wholeEvent(definition, blocks, settings) : passages(definition, blocks, settings);
    const count = await print(found, settings.format, console);
    if (count === 0) console.err('note: no passage was found; --whole measures the recording as one event\n');
  } catch (error) {
    return complainOf(error, console);
  } finally {
    for (const note of recordings.flatMap(({ notes }) => notes)) console.err(`note: ${note}\n`);
  }
  return EXIT.good;
}

async function* passages(
  definition: BridgeDefinition,
  blocks: AsyncIterable<SampleBlock>,
  { definitionVersion }: AnalyseSettings,
): AsyncGenerator<Passage> {
  const state = createPipeline(definition, definitionVersion);
  for await (const block of blocks) for (const { passage } of step(state, block).passages) yield passage;
  for (const { passage } of finish(state).passages) yield passage;
}

async function* wholeEvent(
  definition: BridgeDefinition,
  blocks: AsyncIterable<SampleBlock>,
  { definitionVersion }: AnalyseSettings,
): AsyncGenerator<Passage> {
  const found = measureWhole(definition, definitionVersion, await gatherWhole(definition, blocks));
  if (found !== null) yield found.passage;
}

async function print(
  found: AsyncIterable<Passage>,
  format: AnalyseSettings['format'],
  console: Console,
): Promise<number> {
  let count = 0;
  for await (const passage of found) {
    if (format === 'table' && count === 0) await console.out(tableHeader());
    await console.out(format === 'table' ? tableRow(passage) : `${JSON.stringify(passage)}\n`);
    count++;
  }
  return count;
}
