import { Alarm } from '#core/contract/alarm.ts';
import * as api from '#core/contract/api.ts';
import { BridgeDefinition } from '#core/contract/bridge.ts';
import { ServerMessage, ViewerMessage } from '#core/contract/live.ts';
import { Passage } from '#core/contract/passage.ts';
import { EXIT, type Console } from './outcome.ts';

const DIALECT = 'https://json-schema.org/draft/2020-12/schema';

/** What `schema` can print. */
export const SCHEMAS: Readonly<Record<string, () => object>> = {
  definition: () => ({ $schema: DIALECT, title: 'Bridge definition of Spanbeat', ...BridgeDefinition }),
  passage: () => ({ $schema: DIALECT, title: 'Passage measured by Spanbeat', ...Passage }),
  alarm: () => ({ $schema: DIALECT, title: 'Alarm of Spanbeat', ...Alarm }),
  // A server tells the whole interface with its routes: /api/openapi.json.
  api: () => ({ $schema: DIALECT, title: 'Bodies and queries of the HTTP interface of Spanbeat', $defs: { ...api } }),
  live: () => ({
    $schema: DIALECT,
    title: 'Messages of the live socket of Spanbeat, /live',
    $defs: { ViewerMessage, ServerMessage },
  }),
};

/** `schema NAME`: prints a JSON Schema. */
export async function schema(name: string, console: Console): Promise<number> {
  const found = SCHEMAS[name];
  if (found === undefined) throw new RangeError(`no schema ${name}`);
  await console.out(`${JSON.stringify(found(), null, 2)}\n`);
  return EXIT.good;
}
