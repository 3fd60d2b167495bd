import { open } from 'node:fs/promises';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { openCsv } from './csv.ts';
import { openParquet } from './parquet.ts';
import type { Recording, RecordingOptions } from './recording.ts';

/**
 * Opens a recording, CSV or Parquet by its first bytes.
 *
 * @throws SpanbeatError RECORDING_… and UNIT_UNKNOWN; while the blocks flow also RATE_WRONG
 */
export async function openRecording(
  file: string,
  definition: BridgeDefinition,
  options: RecordingOptions,
): Promise<Recording> {
  const magic = await firstBytes(file);
  return magic === 'PAR1' ? openParquet(file, definition, options) : openCsv(file, definition, options);
}

async function firstBytes(file: string): Promise<string> {
  try {
    const handle = await open(file);
    try {
      const { buffer, bytesRead } = await handle.read(Buffer.alloc(4), 0, 4, 0);
      return buffer.toString('latin1', 0, bytesRead);
    } finally {
      await handle.close();
    }
  } catch (error) {
    const detail = error instanceof Error ? error.message : String(error);
    throw new SpanbeatError({ code: 'RECORDING_UNREADABLE', where: file, detail });
  }
}
