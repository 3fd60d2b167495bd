import { existsSync } from 'node:fs';
import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import fc from 'fast-check';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { csvOfWindow, float32Text, isoMicros } from '#core/contract/csv-text.ts';
import { openRecording } from '../../server/exchange/opening.ts';
import { joinRecordings } from '../../server/exchange/recording.ts';
import { collect } from '../support/collect.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

let folder = '';
let count = 0;
beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-csv-'));
});
afterAll(() => rm(folder, { recursive: true }));

/** A bridge whose sensors A1, A2 run at 100 Hz, T1 at 1 Hz. */
function bridge(over: Partial<BridgeDefinition['sensors'][number]> = {}): BridgeDefinition {
  const definition = aDefinition();
  const sensors = definition.sensors
    .filter(({ id }) => ['A1', 'A2', 'T1'].includes(id))
    .map((sensor) => (sensor.quantity === 'acceleration' ? { ...sensor, rateHz: 100, ...over } : sensor));
  return { ...definition, sensors };
}

async function fileOf(content: string | Uint8Array): Promise<string> {
  const file = join(folder, `recording-${(count += 1)}.csv`);
  await writeFile(file, content);
  return file;
}

async function read(
  content: string | Uint8Array,
  definition = bridge(),
  startMicros: number | null = null,
): Promise<{ blocks: SampleBlock[]; notes: string[]; units: ReadonlyMap<string, string> }> {
  const recording = await openRecording(await fileOf(content), definition, { startMicros });
  const blocks = await collect(recording.blocks);
  return { blocks, notes: recording.notes, units: recording.units };
}

/** All samples of a sensor, in order. */
function samplesOf(blocks: readonly SampleBlock[], sensor: string): number[] {
  return blocks.flatMap(({ channels }) =>
    channels.filter((channel) => channel.sensor === sensor).flatMap(({ samples }) => [...samples]),
  );
}

async function codeOf(
  reading: Promise<unknown>,
): Promise<{ code: string; where: string | undefined; message: string }> {
  const error: unknown = await reading.then(
    () => null,
    (reason: unknown) => reason,
  );
  if (!(error instanceof SpanbeatError)) throw new Error(`expected a complaint, got ${String(error)}`);
  return { code: error.code, where: error.where, message: error.message };
}

const ISO_ROWS = [0, 1, 2, 3].map((i) => `${isoMicros(DAWN + i * 10_000)},${i / 8},${-i}`).join('\n');

describe('a recording in CSV', () => {
  it('gives the samples of its columns with the time of the first row', async () => {
    const { blocks } = await read(`time,A1,A2\n${ISO_ROWS}\n`);
    expect(blocks).toHaveLength(2);
    expect(blocks[0]).toMatchObject({ bridge: 'ottermere', logger: 'north', startMicros: DAWN, rateHz: 100 });
    expect(samplesOf(blocks, 'A1')).toEqual([0, 0.125, 0.25, 0.375]);
    expect(samplesOf(blocks, 'A2')).toEqual([0, -1, -2, -3]);
  });

  it.each([
    ['comma', `time,A1\n0.00,1.5\n0.01,-2.25\n`],
    ['semicolon and decimal comma', `time;A1\n0,00;1,5\n0,01;-2,25\n`],
    ['semicolon and decimal point', `time;A1\n0.00;1.5\n0.01;-2.25\n`],
    ['tab', `time\tA1\n0.00\t1.5\n0.01\t-2.25\n`],
    ['tab and decimal comma', `time\tA1\n0,00\t1,5\n0,01\t-2,25\n`],
    ['quotes around everything', `"time","A1"\n"0.00","1.5"\n"0.01","-2.25"\n`],
    ['a byte order mark', `\uFEFFtime,A1\n0.00,1.5\n0.01,-2.25\n`],
    ['carriage returns', `time,A1\r\n0.00,1.5\r\n0.01,-2.25\r\n`],
    ['comments and blank lines', `# made by hand\n\n% more\ntime,A1\n// and more\n0.00,1.5\n\n0.01,-2.25\n`],
    ['no end of the last line', `time,A1\n0.00,1.5\n0.01,-2.25`],
    ['spaces around fields', `time , A1 \n 0.00 , 1.5 \n 0.01 , -2.25 \n`],
    ['exponents', `time,A1\n0e0,15e-1\n1e-2,-0.225E+1\n`],
    ['trailing separators', `time,A1,\n0.00,1.5,\n0.01,-2.25,\n`],
    ['a row of units', `time;A1\ns;m/s2\n0,00;1,5\n0,01;-2,25\n`],
    ['a row of units in brackets', `time,A1\n[s],[m/s2]\n0.00,1.5\n0.01,-2.25\n`],
  ])('is read with %s', async (_, text) => {
    const { blocks } = await read(text, bridge(), DAWN);
    expect(samplesOf(blocks, 'A1')).toEqual([1.5, -2.25]);
    expect(blocks[0]?.startMicros).toBe(DAWN);
  });

  it.each([
    ['epoch seconds', (micros: number) => (micros / 1e6).toFixed(6)],
    ['epoch milliseconds', (micros: number) => String(micros / 1e3)],
    ['epoch microseconds', (micros: number) => String(micros)],
    ['ISO 8601 in UTC', (micros: number) => isoMicros(micros)],
    ['ISO 8601 without a zone, taken as UTC', (micros: number) => isoMicros(micros).slice(0, -1)],
    ['ISO 8601 with a space', (micros: number) => isoMicros(micros).replace('T', ' ')],
    ['ISO 8601 with an offset', (micros: number) => isoMicros(micros + 5_400e6).replace('Z', '+01:30')],
    ['day.month.year', (micros: number) => isoMicros(micros).replace(/^(\d+)-(\d+)-(\d+)T(.*)Z$/, '$3.$2.$1 $4')],
  ])('knows its time from %s', async (_, write) => {
    const rows = [0, 1, 2].map((i) => `${write(DAWN + i * 10_000)},${i}`).join('\n');
    const { blocks } = await read(`timestamp,A1\n${rows}\n`);
    expect(blocks.map(({ startMicros }) => startMicros)).toEqual([DAWN]);
    expect(samplesOf(blocks, 'A1')).toEqual([0, 1, 2]);
  });

  it('takes the unit of the time from its header', async () => {
    const { blocks } = await read('time [ms],A1\n0,1\n10,2\n20,3\n40,5\n', bridge(), DAWN);
    expect(blocks.map(({ startMicros }) => startMicros - DAWN)).toEqual([0, 40_000]);
  });

  it('says the units of columns that name one, and leaves the others as the logger sent them', async () => {
    const { units } = await read('time,A1 [mg],A2\n0.00,1,1\n0.01,1,1\n', bridge(), DAWN);
    expect([...units]).toEqual([['A1', 'mg']]);
  });

  it('is read under a definition without scale and offset where its column names a unit', async () => {
    const definition = bridge({ unit: 'g', scale: 0.001, offset: 1, range: [-2, 2] });
    const file = await fileOf('time,A1 [m/s2],A2\n0.00,1,1\n0.01,1,1\n');
    const joined = joinRecordings([await openRecording(file, definition, { startMicros: DAWN })], definition);
    const [first, second] = joined.definition.sensors;
    expect(first).toMatchObject({ id: 'A1', unit: 'm/s2', range: [-19.6133, 19.6133] });
    expect(first).not.toHaveProperty('scale');
    expect(second).toMatchObject({ id: 'A2', unit: 'g', scale: 0.001, offset: 1, range: [-2, 2] });
    await joined.blocks.return(undefined);
  });

  it('finds a sensor by the name its logger gives it', async () => {
    const definition = bridge();
    definition.loggers = [{ id: 'north', channels: { 'CH 07': 'A2' } }];
    const { blocks, notes } = await read('time,CH 07,humidity\n0.00,4,50\n0.01,5,50\n', definition, DAWN);
    expect(samplesOf(blocks, 'A2')).toEqual([4, 5]);
    expect(notes).toEqual([expect.stringContaining('passed over "humidity"')]);
  });

  it('begins a new block of a sensor after an absent value, and keeps what says that it is no number', async () => {
    const { blocks } = await read('time,A1,A2\n0.00,1,1\n0.01,,2\n0.02,NaN,3\n0.03,n/a,4\n0.04,5,5\n', bridge(), DAWN);
    const runs = blocks.filter(({ channels }) => channels[0]?.sensor === 'A1');
    expect(runs.map(({ startMicros }) => startMicros - DAWN)).toEqual([0, 20_000, 40_000]);
    expect(samplesOf(blocks, 'A1')).toEqual([1, NaN, 5]);
    expect(samplesOf(blocks, 'A2')).toEqual([1, 2, 3, 4, 5]);
  });

  it('begins a new block after a gap, also of one row', async () => {
    const { blocks } = await read('time,A1\n0.00,1\n0.01,2\n0.03,4\n0.04,5\n9.00,6\n', bridge(), DAWN);
    expect(blocks.map(({ startMicros }) => startMicros - DAWN)).toEqual([0, 30_000, 9_000_000]);
    expect(samplesOf(blocks, 'A1')).toEqual([1, 2, 4, 5, 6]);
  });

  it('joins rows whose stamps are uneven by a third of a sample', async () => {
    const jitter = [0, 0.003, -0.003, 0.002, -0.001, 0.003];
    const rows = jitter.map((off, i) => `${(1 + i * 0.01 + off).toFixed(4)},${i}`).join('\n');
    const { blocks } = await read(`time,A1\n${rows}\n`, bridge(), DAWN);
    expect(blocks).toHaveLength(1);
  });

  it('smooths stamps that are coarser than the samples', async () => {
    // 256 Hz written to the millisecond
    const definition = bridge({ rateHz: 256 });
    const rows = Array.from({ length: 1024 }, (_, i) => `${((i * 1000) / 256 / 1000).toFixed(3)},${i}`).join('\n');
    const { blocks } = await read(`time,A1\n${rows}\n`, definition, DAWN);
    expect(blocks).toHaveLength(8);
    blocks.forEach(({ startMicros }, i) => expect(Math.abs(startMicros - DAWN - i * 500_000)).toBeLessThanOrEqual(60));
  });

  it('keeps rates apart that stand side by side in one file', async () => {
    const rows = Array.from({ length: 200 }, (_, i) => `${i / 100},${i},${i % 100 === 0 ? 7 + i / 100 : ''}`).join(
      '\n',
    );
    const { blocks } = await read(`time,A1,T1\n${rows}\n`, bridge(), DAWN);
    expect(samplesOf(blocks, 'A1')).toHaveLength(200);
    expect(samplesOf(blocks, 'T1')).toEqual([7, 8]);
    const temperatures = blocks.filter(({ rateHz }) => rateHz === 1);
    expect(temperatures.map(({ startMicros }) => startMicros - DAWN)).toEqual([0, 1_000_000]);
  });

  it('leaves out a last line that was cut', async () => {
    const { blocks, notes } = await read('time,A1,A2\n0.00,1,1\n0.01,2,2\n0.02,3', bridge(), DAWN);
    expect(samplesOf(blocks, 'A1')).toEqual([1, 2]);
    expect(notes).toEqual([expect.stringMatching(/:4: the last line is cut/)]);
  });

  it('is the same however the bytes are cut into chunks, since lines may cross them', async () => {
    const rows = Array.from({ length: 30_000 }, (_, i) => `${(i / 100).toFixed(2)},${(i * 0.37) % 5},${i}`);
    const { blocks } = await read(`time,A1,A2\n${rows.join('\n')}\n`, bridge(), DAWN);
    expect(samplesOf(blocks, 'A2')).toEqual(Array.from({ length: 30_000 }, (_, i) => i));
    expect(blocks.every(({ channels }) => channels.every(({ samples }) => samples.length === 50))).toBe(true);
  });
});

describe('a recording that cannot be read', () => {
  it.each([
    ['a file that is not there', 'RECORDING_UNREADABLE', null],
    ['an empty file', 'RECORDING_FORMAT', ''],
    ['a header alone', 'RECORDING_FORMAT', 'time,A1\n'],
    ['no header', 'RECORDING_FORMAT', '0.00,1.5\n0.01,2\n'],
    ['one column', 'RECORDING_FORMAT', 'time\n1\n'],
    ['text for a value', 'RECORDING_FORMAT', 'time,A1\n0.00,1\n0.01,much\n'],
    ['more fields than names, as from a decimal comma', 'RECORDING_FORMAT', 'time,A1\n0,00,1,5\n0,01,2,5\n'],
    ['a thousands separator', 'RECORDING_FORMAT', 'time;A1\n0,00;1.234,5\n0,01;1\n'],
    ['two columns of one sensor', 'RECORDING_FORMAT', 'time,A1,A1 [g]\n0.00,1,1\n'],
    ['UTF-16', 'RECORDING_FORMAT', '\uFEFFtime,A1\n0,1\n'],
    ['no time column', 'RECORDING_TIME', 'when,A1\n0.00,1\n'],
    ['a time that is none', 'RECORDING_TIME', 'time,A1\nnoon,1\nlater,2\n'],
    ['a time without a date', 'RECORDING_TIME', 'time,A1\n08:36:24.897,1\n08:36:24.907,1\n'],
    ['a month of 13', 'RECORDING_TIME', 'time,A1\n2026-13-01T00:00:00Z,1\n'],
    ['a time that stops', 'RECORDING_TIME', 'time,A1\n0.00,1\n,2\n0.02,3\n'],
    ['no sensor of the bridge', 'RECORDING_NO_CHANNEL', 'time,B7\n0.00,1\n0.01,2\n'],
    ['a unit of another quantity', 'UNIT_UNKNOWN', 'time,A1 [°C]\n0.00,1\n0.01,2\n'],
  ])('says so: %s', async (name, code, text) => {
    const bytes = name === 'UTF-16' ? Buffer.from(text ?? '', 'utf16le') : (text ?? '');
    const file = text === null ? join(folder, 'absent.csv') : await fileOf(bytes);
    const reading = openRecording(file, bridge(), { startMicros: DAWN }).then(({ blocks }) => collect(blocks));
    const complaint = await codeOf(reading);
    expect(complaint.code).toBe(code);
    expect(complaint.where).toContain(file);
  });

  it('names line, column and what was found', async () => {
    const complaint = await codeOf(read('# note\ntime,A1\n0.00,1\n0.01,much\n', bridge(), DAWN));
    expect(complaint.where).toMatch(/\.csv:4$/);
    expect(complaint.message).toContain('column A1: found "much", expected a number');
  });

  it('asks for --start where times count from zero', async () => {
    const complaint = await codeOf(read('time,A1\n0.00,1\n0.01,2\n'));
    expect(complaint.code).toBe('RECORDING_TIME');
    expect(complaint.message).toContain('--start');
  });

  it('proposes the sensor a column was meant to be', async () => {
    const complaint = await codeOf(read('time,A_1\n0.00,1\n0.01,2\n', bridge(), DAWN));
    expect(complaint.message).toContain('did you mean A1?');
  });

  it('refuses a rate that is not that of the definition, with the rate it found', async () => {
    const rows = Array.from({ length: 400 }, (_, i) => `${(i / 128).toFixed(7)},${i}`).join('\n');
    const complaint = await codeOf(read(`time,A1\n${rows}\n`, bridge(), DAWN));
    expect(complaint.code).toBe('RATE_WRONG');
    expect(complaint.message).toContain('found 128 Hz, expected 100 Hz');
  });
});

describe('several recordings', () => {
  it('come as one, in order of time', async () => {
    const rows = (from: number, to: number): string =>
      Array.from({ length: to - from }, (_, i) => `${((from + i) / 100).toFixed(2)},${from + i}`).join('\n');
    const later = await fileOf(`time,A1\n${rows(500, 1000)}\n`);
    const earlier = await fileOf(`time,A1\n${rows(0, 500)}\n`);
    const beside = await fileOf(`time,A2\n${rows(0, 1000)}\n`);
    const definition = bridge();
    const opened = await Promise.all(
      [later, earlier, beside].map((file) => openRecording(file, definition, { startMicros: DAWN })),
    );
    const blocks = await collect(joinRecordings(opened, definition).blocks);
    const starts = blocks.map(({ startMicros }) => startMicros);
    expect(starts).toHaveLength(40);
    expect(starts).toEqual(starts.toSorted((a, b) => a - b));
    expect(samplesOf(blocks, 'A1')).toEqual(Array.from({ length: 1000 }, (_, i) => i));
    expect(samplesOf(blocks, 'A2')).toHaveLength(1000);
  });

  it('are refused where they give a sensor in two units', async () => {
    const definition = bridge();
    const files = await Promise.all(['A1', 'A1 [g]'].map((name) => fileOf(`time,${name}\n0.00,1\n0.01,2\n`)));
    const opened = await Promise.all(files.map((file) => openRecording(file, definition, { startMicros: DAWN })));
    expect(() => joinRecordings(opened, definition)).toThrow(/RECORDING_FORMAT.*in g.*as its logger sends it/);
  });
});

describe('a wave form written as CSV', () => {
  it('comes back to the same float32 samples and times', async () => {
    const definition = bridge();
    await fc.assert(
      fc.asyncProperty(
        fc.array(fc.float({ noNaN: true, noDefaultInfinity: true, min: Math.fround(-1e6), max: Math.fround(1e6) }), {
          minLength: 10,
          maxLength: 80,
        }),
        async (values) => {
          const samples = Float32Array.from(values);
          const channels = [
            { sensor: 'A1', rateHz: 100, runs: [{ startMicros: DAWN, samples }] },
            { sensor: 'A2', rateHz: 100, runs: [{ startMicros: DAWN + 3_000_000, samples }] },
            { sensor: 'T1', rateHz: 1, runs: [{ startMicros: DAWN + 1234, samples: samples.subarray(0, 2) }] },
          ];
          const text = [...csvOfWindow(definition, channels)].join('');
          const { blocks, units } = await read(text, definition);
          expect(units.get('A1')).toBe('m/s²');
          for (const { sensor, runs } of channels) {
            expect(Float32Array.from(samplesOf(blocks, sensor))).toEqual(runs[0]?.samples);
            const first = blocks.find((block) => block.channels.some((channel) => channel.sensor === sensor));
            expect(first?.startMicros).toBe(runs[0]?.startMicros);
          }
        },
      ),
      { numRuns: 40, seed: 41320 },
    );
  });

  it('writes a float32 as briefly as it can be told apart', () => {
    expect(float32Text(Math.fround(0.1))).toBe('0.1');
    expect(float32Text(16_777_216)).toBe('16777216');
    expect(float32Text(-0)).toBe('-0');
    fc.assert(
      fc.property(fc.float({ noNaN: true, noDefaultInfinity: true }), (value) => {
        expect(Math.fround(Number(float32Text(value)))).toBe(value);
      }),
      { numRuns: 2000, seed: 43905 },
    );
  });
});

const MUNICH = new URL(
  '../../../shared/data/munich_bridge/UniBw_2022-04-11_ref_support_load_01AllM100Hz.csv',
  import.meta.url,
).pathname;

// Published by the University of the Bundeswehr Munich under MIT (SOURCE.txt beside it); read where it lies.
describe.skipIf(!existsSync(MUNICH))('the published recording of the Munich test bridge', () => {
  it('is read whole: 72 000 samples over 720 s at 100 Hz, accelerations in g, forces passed over', async () => {
    const definition = bridge();
    definition.loggers = [{ id: 'north', channels: { ACC01_z: 'A1' } }];
    const recording = await openRecording(MUNICH, definition, { startMicros: null });
    const blocks = await collect(recording.blocks);
    const samples = samplesOf(blocks, 'A1');
    expect(samples).toHaveLength(72_000);
    expect(samples[0]).toBe(4.93101433676202e-5);
    expect(recording.units.get('A1')).toBe('g');
    expect(recording.notes.join()).toContain('"FRC-01"');
    // its own first and last stamp, as written there (day and month are swapped in the file, SOURCE.txt)
    expect(isoMicros(blocks[0]?.startMicros ?? 0)).toBe('2022-11-04T08:36:24.897000Z');
    const last = blocks.at(-1);
    const end = (last?.startMicros ?? 0) + ((last?.channels[0]?.samples.length ?? 0) - 1) * 10_000;
    expect(isoMicros(end)).toBe('2022-11-04T08:48:24.887000Z');
  });
});
