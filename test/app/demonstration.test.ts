import { writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterEach, beforeEach, expect, test } from 'vitest';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Micros } from '#core/contract/time.ts';
import { startServer, type Surroundings } from '../../server/server.ts';
import { pastFromMicros, pastPassages } from '../../simulator/demonstration.ts';
import { plainBridge } from '../support/bridges.ts';
import { temporaryFolder } from '../support/server.ts';

const NOW: Micros = 1_796_101_953_000_000;
const DAY: Micros = 86_400_000_000;

let folder: { path: string; remove(): Promise<void> };
beforeEach(async () => {
  folder = await temporaryFolder('demonstration');
});
afterEach(() => folder.remove());

test('no train of the made past is before the beginning that is told of it', () => {
  const days = 2;
  const fromMicros = pastFromMicros(NOW, days);
  expect(fromMicros).toBeLessThanOrEqual(NOW - days * DAY);
  const past = pastPassages({ definitions: [plainBridge()], nowMicros: NOW, days, perDay: 1, seed: 1 });
  const begins = [...past].map(({ blocks }) => blocks[0]!.startMicros);
  expect(begins.length).toBeGreaterThan(days - 1);
  for (const begin of begins) expect(begin).toBeGreaterThan(fromMicros);
});

test('a bridge that is new is defined since the day that is given, a change of it since now', async () => {
  const firstDefinedMicros = pastFromMicros(NOW, 7);
  expect(await versionsAfterStart(plainBridge(), { firstDefinedMicros })).toEqual([
    { version: 1, sinceMicros: firstDefinedMicros },
  ]);
  expect(await versionsAfterStart(plainBridge({ name: 'Another Name' }), { firstDefinedMicros })).toEqual([
    { version: 1, sinceMicros: firstDefinedMicros },
    { version: 2, sinceMicros: NOW },
  ]);
});

async function versionsAfterStart(definition: BridgeDefinition, surroundings: Surroundings): Promise<unknown> {
  // JSON is YAML.
  await writeFile(join(folder.path, 'plain.yaml'), JSON.stringify(definition));
  const server = await startServer(
    {
      bridges: [join(folder.path, 'plain.yaml')],
      dataFolder: join(folder.path, 'data'),
      host: '127.0.0.1',
      port: 0,
      broker: { kind: 'embedded', port: 0 },
      root: 'spanbeat',
      allowedOrigins: [],
      journal: { maxHours: 1, maxBytes: 1e9 },
      retention: {},
      workers: 1,
      logLevel: 'silent',
    },
    { clock: () => NOW, ...surroundings },
  );
  const versions = server.history.versions(definition.id);
  await server.stop();
  return versions;
}
