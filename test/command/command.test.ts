import { execFile, spawn } from 'node:child_process';
import { mkdtemp, readFile, rm, writeFile } from 'node:fs/promises';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { promisify } from 'node:util';
import { Aedes } from 'aedes';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { stringify } from 'yaml';
import { Value } from 'typebox/value';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { ERRORS } from '#core/contract/errors.ts';
import { Passage } from '#core/contract/passage.ts';
import type { PassageWindow } from '#core/contract/pipeline.ts';
import { createPipeline, finish, step } from '#core/passage/pipeline.ts';
import { definitionFile } from '../../server/command/definition-file.ts';
import { exitOf } from '../../server/command/outcome.ts';
import { createProgram } from '../../server/command/program.ts';
import { readDefinition } from '../../server/definition.ts';
import { openArchive, placeOf } from '../../server/history/archive.ts';
import { decodeSamples } from '../../server/ingest/samples-payload.ts';
import { createLoggers } from '../../simulator/logger.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { createBridgeSimulation } from '../../simulator/simulation.ts';
import { createTrain } from '../../simulator/train.ts';
import { createRandom } from '../support/random.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

let folder = '';
beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-command-'));
});
afterAll(() => rm(folder, { recursive: true }));

/** Runs a command in this process. */
async function run(...words: string[]): Promise<{ exit: number | null; out: string; err: string }> {
  let out = '';
  let err = '';
  const exit = await createProgram('0.0.0', {
    out: (text) => {
      out += text;
      return Promise.resolve();
    },
    err: (text) => void (err += text),
  }).run(words);
  return { exit, out, err };
}

const path = (name: string): string => join(folder, name);

const passagesOf = (out: string): Passage[] =>
  out
    .trim()
    .split('\n')
    .filter((line) => line !== '')
    .map((line) => JSON.parse(line) as Passage);

async function definitionOf(id: string): Promise<{ definition: BridgeDefinition; text: string }> {
  const reading = await readDefinition(definitionFile(id));
  if (!reading.ok) throw new Error(JSON.stringify(reading.complaints));
  return reading.value;
}

/** Two trains over a bridge as its logger sends them, in blocks of 0.2 s. */
function stream(definition: BridgeDefinition): SampleBlock[] {
  const parameters = bridgeParameters(definition);
  const simulation = createBridgeSimulation({ definition, parameters, seed: 11, startMicros: DAWN });
  const common = { kind: 'passage' as const, direction: 'rising' as const };
  simulation.schedule({ ...common, train: createTrain('intercity', 1), onMicros: DAWN + 20e6, speedMs: 44.4 });
  simulation.schedule({ ...common, train: createTrain('light engine', 2), onMicros: DAWN + 60e6, speedMs: 25 });
  const loggers = createLoggers(definition);
  return Array.from({ length: 450 }, (_, turn) =>
    loggers.gather(simulation.advance(DAWN + (turn + 1) * 200_000)),
  ).flat();
}

function pipeline(definition: BridgeDefinition, blocks: readonly SampleBlock[]): PassageWindow[] {
  const state = createPipeline(definition, 1);
  const found = blocks.flatMap((block) => step(state, block).passages);
  return [...found, ...finish(state).passages];
}

/** The stream as CSV by hand, one file a rate, decimal commas and all: nothing of the program's own writer. */
async function writeCsv(blocks: readonly SampleBlock[]): Promise<string[]> {
  const files: string[] = [];
  for (const rateHz of new Set(blocks.map((block) => block.rateHz))) {
    const run = blocks.filter((block) => block.rateHz === rateHz);
    const lines = [`Time;${run[0]!.channels.map(({ sensor }) => sensor).join(';')}`];
    for (const { startMicros, channels } of run) {
      for (let i = 0; i < channels[0]!.samples.length; i++) {
        const micros = startMicros + Math.round((i * 1e6) / rateHz);
        lines.push([micros, ...channels.map(({ samples }) => String(samples[i]).replace('.', ','))].join(';'));
      }
    }
    const file = path(`stream-${rateHz}.csv`);
    await writeFile(file, `${lines.join('\n')}\n`);
    files.push(file);
  }
  return files;
}

describe('analyse', () => {
  it.each(['ottermere', 'fennick'])('gives the passages of the live stream, bit for bit: %s', async (id) => {
    const { definition } = await definitionOf(id);
    const blocks = stream(definition);
    const live = pipeline(definition, blocks);
    expect(live).toHaveLength(2);
    const { exit, out } = await run('analyse', ...(await writeCsv(blocks)), '--bridge', id);
    expect(exit).toBe(0);
    expect(passagesOf(out)).toEqual(live.map(({ passage }) => JSON.parse(JSON.stringify(passage)) as Passage));
    expect(passagesOf(out).every((passage) => Value.Check(Passage, passage))).toBe(true);
  });

  it('prints a table with units', async () => {
    const { definition } = await definitionOf('ottermere');
    const files = await writeCsv(stream(definition));
    const { exit, out } = await run('analyse', ...files, '--bridge', 'ottermere', '--format', 'table');
    expect(exit).toBe(0);
    const [head, first, second, ...rest] = out.trimEnd().split('\n');
    expect(rest).toEqual([]);
    expect(head).toMatch(/passage .*first axle \(UTC\) .*speed \[km\/h\] .*peak \[m\/s²\] .*f1 \[Hz\] .*ζ1 \[%\]/);
    // 44.4 m/s and 32 axles; 25 m/s and 4
    expect(first).toMatch(/ 159\.[89] +32 | 160\.0 +32 /);
    expect(second).toMatch(/ (89\.9|90\.[01]) +4 /);
    expect(head?.indexOf('quality')).toBe(first?.search(/(good|usable|poor)$/));
  });

  it('tells of a level that is passed without a train: when, where, how far, and what to do', async () => {
    const random = createRandom(5);
    // A blow that rings off at 5.2 Hz in a minute of noise: 6 m/s², where IAL is 3.5.
    const lines = Array.from({ length: 30_000 }, (_, i) => {
      const sinceS = i / 500 - 30;
      const ring = sinceS < 0 ? 0 : 6 * Math.exp(-0.8 * sinceS) * Math.sin(2 * Math.PI * 5.2 * sinceS);
      const noise = (): number => random.uniform(-0.01, 0.01);
      return [DAWN + i * 2000, ring + noise(), 0.1 * ring + noise()].join(',');
    });
    await writeFile(path('blow.csv'), `time,A3,A4\n${lines.join('\n')}\n`);
    const { exit, out, err } = await run('analyse', path('blow.csv'), '--bridge', 'ottermere');
    expect(exit).toBe(0);
    const [passage, ...rest] = passagesOf(out);
    expect(rest).toEqual([]);
    expect(passage?.phases.foundBy).toBe('live level');
    expect(err).toMatch(
      /^note: ottermere-\S+: no train was recognised, but the deck passed a level: 5\.\d\d m\/s² on A3 at 2026-12-01 05:13:03\.\d UTC, above IAL of limit deck \(3\.5 m\/s²\); --whole measures the recording as one event\n$/m,
    );
    const table = await run('analyse', path('blow.csv'), '--bridge', 'ottermere', '--format', 'table');
    expect(table.out.split('\n')[1]).toContain('no train');
  });

  it('measures the whole recording as one event where it is told to', async () => {
    const { definition } = await definitionOf('ottermere');
    const files = await writeCsv(stream(definition).filter(({ startMicros }) => startMicros < DAWN + 45e6));
    const { exit, out } = await run('analyse', ...files, '--bridge', 'ottermere', '--whole');
    expect(exit).toBe(0);
    const [passage, ...rest] = passagesOf(out);
    expect(rest).toEqual([]);
    expect(passage?.startMicros).toBe(DAWN);
    expect(passage?.axleCount.value).toBe(32);
    const found = pipeline(definition, stream(definition))[0]!.passage;
    // the offset is learnt from more quiet here: it differs by its own error, 0.004 m/s² over some thousand samples
    expect(Math.abs(passage!.rawPeak.value! - found.rawPeak.value!)).toBeLessThan(3e-4);
  });

  it('measures a wave form of the archive to the bits of the stored passage', async () => {
    const { definition, text } = await definitionOf('fennick');
    const archive = await openArchive(path('archive'));
    for (const { passage, channels } of pipeline(definition, stream(definition))) {
      await archive.write(
        { passage, definition: { bridge: 'fennick', version: 1, sinceMicros: DAWN, text, definition } },
        channels,
      );
      const { exit, out } = await run('analyse', archive.path(placeOf(passage)), '--bridge', 'fennick');
      expect(exit).toBe(0);
      expect(passagesOf(out)).toEqual([JSON.parse(JSON.stringify(passage))]);
      const other = await run('analyse', archive.path(placeOf(passage)), '--bridge', 'ottermere');
      expect(other.exit).toBe(1);
    }
    archive.close();
  });

  it('says so where it finds nothing', async () => {
    const file = path('quiet.csv');
    await writeFile(
      file,
      `time,A1\n${Array.from({ length: 5000 }, (_, i) => `${i / 500},${(i * 7) % 3}e-4`).join('\n')}\n`,
    );
    const { exit, out, err } = await run('analyse', file, '--bridge', 'ottermere', '--start', '2026-12-01T05:00:00Z');
    expect({ exit, out }).toEqual({ exit: 0, out: '' });
    expect(err).toMatch(/^note: no passage was found/);
  });

  it.each([
    ['a recording that is not there', 3, 'RECORDING_UNREADABLE', ['/nowhere.csv', '-b', 'ottermere']],
    ['a definition that is not there', 3, 'DEFINITION_UNREADABLE', ['/nowhere.csv', '-b', '/nowhere.yaml']],
    ['no definition', 2, 'USAGE', ['/nowhere.csv']],
    ['no recording', 2, 'USAGE', ['-b', 'ottermere']],
    ['a form that is none', 2, 'USAGE', ['x.csv', '-b', 'ottermere', '-f', 'xml']],
    ['a start that is no time', 2, 'USAGE', ['x.csv', '-b', 'ottermere', '--start', 'noon']],
    ['a start in 1970', 2, 'USAGE', ['x.csv', '-b', 'ottermere', '--start', '0']],
  ])('fails with its code and exit: %s', async (_, exit, code, words) => {
    const ran = await run('analyse', ...words);
    expect(ran.exit).toBe(exit);
    expect(ran.out).toBe('');
    expect(ran.err).toMatch(new RegExp(`^${code}: .*\\n$`));
  });

  it('says what is wrong in a recording, with its line', async () => {
    const file = path('bad.csv');
    await writeFile(file, 'time,A1\n1796101953.000,1\n1796101953.002,x\n');
    const { exit, err } = await run('analyse', file, '-b', 'ottermere');
    expect(exit).toBe(1);
    expect(err).toContain(`RECORDING_FORMAT: ${file}:3: column A1: found "x", expected a number`);
  });
});

describe('check', () => {
  it('is good about sound definitions and tells what they hold', async () => {
    const { exit, out, err } = await run('check', definitionFile('ottermere'), definitionFile('sallow'));
    expect({ exit, err }).toEqual({ exit: 0, err: '' });
    expect(out).toContain('sallow, Sallow Water: 2 spans, 11 sensors, 1 limit');
  });

  it('tells all that is wrong in all files, one line each, and gives the gravest exit', async () => {
    const definition = aDefinition();
    definition.sensors[0]!.unit = 'furlong';
    definition.sensors[1]!.logger = 'south';
    await writeFile(path('faulty.yaml'), stringify(definition));
    const one = await run('check', path('faulty.yaml'), definitionFile('ottermere'));
    expect(one.exit).toBe(1);
    expect(
      one.err
        .trimEnd()
        .split('\n')
        .map((line) => line.split(':')[0]),
    ).toEqual(['UNIT_UNKNOWN', 'DEFINITION_REFERENCE']);
    expect(one.out).toContain('ottermere.yaml: good');
    expect((await run('check', path('faulty.yaml'), '/nowhere.yaml')).exit).toBe(3);
  });
});

describe('schema', () => {
  it('prints a JSON Schema by which the demonstration is sound', async () => {
    const { exit, out } = await run('schema', 'definition');
    expect(exit).toBe(0);
    const schema = JSON.parse(out) as Record<string, unknown>;
    expect(schema).toMatchObject({ $schema: 'https://json-schema.org/draft/2020-12/schema', type: 'object' });
    const { definition } = await definitionOf('ottermere');
    expect(Value.Check(schema, definition)).toBe(true);
    expect(Value.Check(schema, { ...definition, spans: [] })).toBe(false);
  });

  it.each(['passage', 'alarm', 'api', 'live'])('prints that of %s', async (name) => {
    const { exit, out } = await run('schema', name);
    expect(exit).toBe(0);
    expect(JSON.parse(out)).toHaveProperty('$schema');
  });

  it('knows no other', async () => {
    const { exit, err } = await run('schema', 'train');
    expect(exit).toBe(2);
    expect(err).toContain('definition, passage, alarm, api');
  });
});

describe('simulate', () => {
  it('writes a file that analyse reads, with the truth beside, the same for the same seed', async () => {
    const words = [
      '-b',
      'ottermere',
      '-t',
      'regional multiple unit',
      '-n',
      '2',
      '--speed',
      '33',
      '--direction',
      'falling',
    ];
    const first = await run('simulate', ...words, '--seed', '5', '--to', path('a.csv'));
    expect(first).toMatchObject({ exit: 0, out: '' });
    await run('simulate', ...words, '--seed', '5', '--to', path('b.csv'));
    await run('simulate', ...words, '--seed', '6', '--to', path('c.csv'));
    const [a, b, c] = await Promise.all(['a.csv', 'b.csv', 'c.csv'].map((name) => readFile(path(name), 'utf8')));
    expect(b).toBe(a);
    expect(c).not.toBe(a);
    const truth = JSON.parse(await readFile(path('a.truth.json'), 'utf8')) as {
      bridge: string;
      passages: { onMicros: number; train: { axles: unknown[] } }[];
    };
    const passages = passagesOf((await run('analyse', path('a.csv'), '-b', 'ottermere')).out);
    expect(passages.map((passage) => passage.axleCount)).toMatchObject([{ value: 12 }, { value: 12 }]);
    expect(passages.map(({ direction }) => direction)).toEqual(['falling', 'falling']);
    for (const [index, { speedMs, phases }] of passages.entries()) {
      expect(speedMs.value).toBeGreaterThan(33 * 0.99);
      expect(speedMs.value).toBeLessThan(33 * 1.01);
      // within 0.1 s of the truth
      expect(Math.abs(phases.onMicros - truth.passages[index]!.onMicros)).toBeLessThan(100_000);
    }
  });

  it('writes SenML packs of one logger, and asks which where there are several', async () => {
    const one = await readFile(definitionFile('fennick'), 'utf8');
    const two = one
      .replace('  - { id: FE-1, silentAfterS: 10 }', '  - { id: FE-1, silentAfterS: 10 }\n  - { id: FE-2 }')
      .replace(/logger: FE-1(, mount: deck.*A2|)/, 'logger: FE-2$1');
    await writeFile(path('two.yaml'), two);
    const words = ['-b', path('two.yaml'), '-t', 'light engine', '-n', '1', '--as', 'senml', '--to', path('two.json')];
    const unclear = await run('simulate', ...words);
    expect(unclear.exit).toBe(2);
    expect(unclear.err).toContain('FE-1, FE-2');
    expect((await run('simulate', ...words, '--logger', 'FE-3')).exit).toBe(2);
    expect((await run('simulate', ...words, '--logger', 'FE-2')).exit).toBe(0);
    const packs = (await readFile(path('two.json'), 'utf8')).trim().split('\n');
    const names = packs.flatMap((pack) => (JSON.parse(pack) as { n: string }[]).map(({ n }) => n));
    expect([...new Set(names)]).toEqual(['A1']);
  });

  it('lets loggers have faults, of which analyse makes the same passages but for what was lost', async () => {
    const words = ['-b', 'fennick', '-t', 'light engine', '-n', '6', '--seed', '9', '--faults'];
    expect((await run('simulate', ...words, '--to', path('faulty.csv'))).exit).toBe(0);
    const { exit, out } = await run('analyse', path('faulty.csv'), '-b', 'fennick');
    expect(exit).toBe(0);
    const passages = passagesOf(out);
    const truth = JSON.parse(await readFile(path('faulty.truth.json'), 'utf8')) as { passages: { onMicros: number }[] };
    // a clock that steps by up to 0.05 s, and a gap of at most 5 s and a silence of 8 that may hide a train
    const found = truth.passages.filter(({ onMicros }) =>
      passages.some(({ phases }) => Math.abs(phases.onMicros - onMicros) < 200_000),
    );
    expect(found.length).toBeGreaterThanOrEqual(4);
    expect(passages.length).toBeLessThanOrEqual(truth.passages.length);
  });

  it('publishes to a broker everything it simulates, acknowledged, in the past of its clock', async () => {
    const received: { topic: string; payload: Buffer }[] = [];
    const aedes = await Aedes.createBroker();
    aedes.on('publish', ({ topic, payload }) => void received.push({ topic, payload: Buffer.from(payload) }));
    const server = createServer(aedes.handle);
    await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
    const address = server.address();
    const port = address !== null && typeof address === 'object' ? address.port : 0;
    const words = [
      '-b',
      'fennick',
      '-t',
      'light engine',
      '-n',
      '1',
      '--to',
      `mqtt://127.0.0.1:${port}`,
      '--root',
      'site',
    ];
    const { exit, err } = await run('simulate', ...words, '--truth', path('mqtt.truth.json'));
    await new Promise<void>((resolve) => aedes.close(() => resolve()));
    await new Promise<void>((resolve) => server.close(() => resolve()));
    expect(exit).toBe(0);
    expect(err).toContain('the truth of 1 passage is in');
    const samples = received
      .filter(({ topic }) => topic === 'site/fennick/FE-1/samples')
      .map(({ payload }) => decodeSamples(payload));
    const sequences = samples.map((each) => (each.ok ? each.value.sequence : null));
    expect(sequences.length).toBeGreaterThan(80);
    expect(received.filter(({ topic }) => topic.endsWith('/status')).map(({ payload }) => payload.toString())).toEqual([
      'online',
      'offline',
    ]);
    const newest = Math.max(...samples.map((each) => (each.ok ? each.value.startMicros : 0)));
    expect(newest).toBeLessThanOrEqual(Date.now() * 1000);
  });

  it.each([
    ['no broker', 3, 'BROKER_UNREACHABLE', ['-b', 'ottermere', '-n', '1', '--to', 'mqtt://127.0.0.1:1']],
    ['a folder that is not there', 3, 'FILE_UNWRITABLE', ['-b', 'ottermere', '-n', '1', '--to', '/nowhere/x.csv']],
    ['a bridge that is not there', 3, 'DEFINITION_UNREADABLE', ['-b', 'severn', '--to', 'x.csv']],
    ['a train that is none', 2, 'USAGE', ['-b', 'ottermere', '-t', 'tram', '--to', 'x.csv']],
    ['no passage', 2, 'USAGE', ['-b', 'ottermere', '-n', '0', '--to', 'x.csv']],
    ['a speed that is none', 2, 'USAGE', ['-b', 'ottermere', '--speed', 'fast', '--to', 'x.csv']],
    ['a speed of an aircraft', 2, 'USAGE', ['-b', 'ottermere', '--speed', '200', '--to', 'x.csv']],
    ['fast and in real time', 2, 'USAGE', ['-b', 'ottermere', '--fast', '--real-time', '--to', 'x.csv']],
  ])('fails with its code and exit: %s', async (_, exit, code, words) => {
    const ran = await run('simulate', ...words);
    expect(ran.exit).toBe(exit);
    expect(ran.err).toMatch(new RegExp(`^${code}: `));
  });
});

describe('the command line', () => {
  it.each([[], ['serve'], ['demo'], ['analyse'], ['simulate'], ['check'], ['schema']])(
    'explains itself: %s',
    async (...words) => {
      const { exit, out, err } = await run(...words.filter((word) => typeof word === 'string'), '--help');
      expect({ exit, err }).toEqual({ exit: 0, err: '' });
      expect(out).toContain('Usage: spanbeat');
    },
  );

  it('tells the exit codes, and that it is advisory', async () => {
    const { out } = await run('--help');
    expect(out).toMatch(/0 {2}good\n.*1 {2}.*\n.*2 {2}.*\n.*3 {2}/);
    expect(out).toContain('advisory');
  });

  it('answers nothing, and a word it does not know, with usage', async () => {
    expect(await run()).toMatchObject({ exit: 2, out: '' });
    const { exit, err } = await run('analyze', 'x');
    expect(exit).toBe(2);
    expect(err).toMatch(/^USAGE: .*Did you mean analyse\?/);
  });

  it('takes settings that cannot be for usage', async () => {
    const { exit } = await run('serve', '--port', '70000');
    expect(exit).toBe(2);
  });

  it('has an exit for each code', () => {
    const exits = new Set(Object.keys(ERRORS).map((code) => exitOf(code as keyof typeof ERRORS)));
    expect(exits).toEqual(new Set([1, 2, 3]));
  });
});

const MAIN = new URL('../../server/main.ts', import.meta.url).pathname;

describe('the program', () => {
  it('prints results to standard output only, and ends with the exit code', async () => {
    const good = await promisify(execFile)(process.execPath, [MAIN, 'check', definitionFile('fennick')]);
    expect(good).toMatchObject({ stderr: '', stdout: expect.stringContaining('good; fennick') as string });
    await expect(promisify(execFile)(process.execPath, [MAIN, 'check', '/nowhere.yaml'])).rejects.toMatchObject({
      code: 3,
      stdout: '',
      stderr: expect.stringMatching(/^DEFINITION_UNREADABLE: /) as string,
    });
  });

  it('ends quietly when its reader goes away', async () => {
    const child = spawn(process.execPath, [MAIN, 'simulate', '-b', 'sallow', '-n', '50', '--to', '-']);
    let err = '';
    child.stderr.on('data', (chunk: Buffer) => (err += chunk.toString()));
    child.stdout.once('data', () => child.stdout.destroy());
    const code = await new Promise((resolve) => child.on('close', resolve));
    expect({ code, err }).toEqual({ code: 0, err: '' });
  });
});
