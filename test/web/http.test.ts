import { mkdtemp, mkdir, rm, writeFile } from 'node:fs/promises';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { Value } from 'typebox/value';
import { isoMicros } from '#core/contract/csv-text.ts';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { ApiComplaint } from '#core/contract/api.ts';
import { decodeFrame } from '#core/contract/frame.ts';
import type { Complaint } from '#core/contract/errors.ts';
import { originAllowed } from '../../server/web/origin.ts';
import { startWeb, type Web } from '../../server/web/web.ts';
import { aPassage, aWindow } from '../support/specimen.ts';
import { fakeBackend } from './fake-backend.ts';

const passage = aPassage({ peaks: { A1: 2.9, A2: 2.1, A3: 0.7, A4: 0.2 } });
let folder: string;
let web: Web;
let backend: ReturnType<typeof fakeBackend>;
const complaints: Complaint[] = [];

beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'web-'));
  await mkdir(join(folder, 'assets'));
  await writeFile(join(folder, 'index.html'), '<!doctype html><title>page</title>');
  await writeFile(join(folder, 'assets', 'main-abc123.js'), 'export {};');
  backend = fakeBackend();
  web = await start();
});
afterAll(async () => {
  await web.stop();
  await rm(folder, { recursive: true });
});

const start = (over: Partial<Parameters<typeof startWeb>[0]> = {}): Promise<Web> =>
  startWeb({
    backend,
    clientFolder: folder,
    host: '127.0.0.1',
    port: 0,
    channels: 5,
    version: '0',
    report: (complaint) => complaints.push(complaint),
    checkAnswers: true,
    ...over,
  });

const get = (path: string, init: RequestInit = {}): Promise<Response> => fetch(web.url + path, init);
const post = (path: string, body: unknown, headers: Record<string, string> = {}): Promise<Response> =>
  get(path, {
    method: 'POST',
    headers: { 'content-type': 'application/json', ...headers },
    body: typeof body === 'string' ? body : JSON.stringify(body),
  });

async function complains(response: Response, status: number, code: string): Promise<void> {
  const body: unknown = await response.json();
  expect({ status: response.status, body }).toMatchObject({ status, body: { code } });
  expect(Value.Check(ApiComplaint, body)).toBe(true);
}

describe('the HTTP interface', () => {
  test('answers every route of the contract with what its schema says', async () => {
    // `checkAnswers` compares each JSON answer with its schema before it leaves.
    const paths = [
      '/api/status',
      '/api/bridges',
      '/api/bridges/ottermere',
      '/api/bridges/ottermere/spectra?sensor=A1',
      '/api/passages?bridge=ottermere&minPeak=2.2&order=peak&limit=10',
      '/api/days?bridge=ottermere&from=2026-11-01&to=2026-12-01',
      `/api/passages/${passage.id}`,
      `/api/passages/${passage.id}/recomputed`,
      '/api/alarms?which=open',
      `/api/alarms/${backend.openAlarms()[0]!.id}`,
      '/api/errors',
    ];
    for (const path of paths) {
      const response = await get(path);
      expect(`${path} ${response.status} ${response.ok ? '' : await response.text()}`).toBe(`${path} 200 `);
      expect(response.headers.get('content-type')).toBe('application/json; charset=utf-8');
    }
  });

  test('an answer that does not fit its schema is a fault of the server that the tests would see', async () => {
    const broken = await start({ backend: { ...backend, errors: () => [{ code: 1 } as never] } });
    await complains(await fetch(`${broken.url}/api/errors`), 500, 'SERVER_FAULT');
    await broken.stop();
  });

  test('an unknown id is NOT_FOUND on every route that takes one', async () => {
    const paths = [
      '/api/bridges/nowhere',
      '/api/bridges/nowhere/definition',
      '/api/bridges/ottermere/definition?version=7',
      '/api/bridges/nowhere/spectra',
      '/api/days?bridge=nowhere&from=2026-11-01&to=2026-12-01',
      '/api/passages/none',
      '/api/passages/none/waveform',
      '/api/passages/none/waveform.csv',
      `/api/passages/${passage.id}/waveform.csv?sensor=Z9`,
      '/api/passages/none/waveform.parquet',
      '/api/passages/none/recomputed',
      '/api/alarms/none',
      '/api/nothing',
      '/assets/missing.js',
    ];
    for (const path of paths) await complains(await get(path), 404, 'NOT_FOUND');
    await complains(await post('/api/alarms/none/acknowledge', { by: 'M. Ash', note: '' }), 404, 'NOT_FOUND');
  });

  test('a request that does not fit the contract is refused and says where', async () => {
    const paths = [
      '/api/passages?limit=0',
      '/api/passages?limit=1001',
      '/api/passages?limit=many',
      '/api/passages?order=size',
      '/api/passages?colour=red',
      '/api/passages?fromMicros=-1',
      '/api/days?bridge=ottermere',
      '/api/days?bridge=ottermere&from=2026-13-45&to=2026-12-01',
      '/api/days?bridge=ottermere&from=2026-12-02&to=2026-12-01',
      '/api/days?bridge=ottermere&from=2024-12-02&to=2026-12-01',
      '/api/alarms?which=some',
      `/api/passages/${'x'.repeat(200)}`,
      '/api/bridges/ottermere/definition?version=0',
    ];
    for (const path of paths) await complains(await get(path), 400, 'REQUEST_INVALID');
    const told = (await (await get('/api/passages?quality=nice')).json()) as { message: string };
    expect(told.message).toContain('querystring: quality: found "nice", expected "good" or "usable" or "poor"');
    const alarm = `/api/alarms/${backend.openAlarms()[0]!.id}/acknowledge`;
    await complains(await post(alarm, { note: 'without a name' }), 400, 'REQUEST_INVALID');
    await complains(await post(alarm, { by: '', note: '' }), 400, 'REQUEST_INVALID');
    await complains(await post(alarm, { by: 'a', note: '', extra: 1 }), 400, 'REQUEST_INVALID');
    await complains(await post(alarm, '{"by": "a", '), 400, 'REQUEST_INVALID');
    await complains(await post(alarm, 'by=a', { 'content-type': 'text/plain' }), 400, 'REQUEST_INVALID');
    await complains(await post(alarm, { by: 'a', note: 'n'.repeat(70_000) }), 400, 'REQUEST_INVALID');
    expect(complaints.some(({ code }) => code === 'REQUEST_INVALID')).toBe(true);
  });

  test('an alarm is acknowledged once, with name and note', async () => {
    const alarm = backend.openAlarms()[0]!;
    const path = `/api/alarms/${alarm.id}/acknowledge`;
    const first = await post(path, { by: 'M. Ash', note: 'looked at it' });
    expect(first.status).toBe(200);
    expect(await first.json()).toMatchObject({ state: 'acknowledged', acknowledged: { by: 'M. Ash' } });
    await complains(await post(path, { by: 'M. Ash', note: 'again' }), 409, 'ALARM_STATE');
  });

  test('a page of another site may not act, also when it has renamed this machine', async () => {
    const path = '/api/alarms/none/acknowledge';
    const body = { by: 'a', note: '' };
    await complains(await post(path, body, { origin: 'https://elsewhere.example' }), 403, 'ORIGIN_REFUSED');
    await complains(await post(path, body, { origin: web.url }), 404, 'NOT_FOUND');
    const loopback = { allowed: ['https://desk.example'], loopback: true };
    expect(originAllowed('http://evil.example:8600', 'evil.example:8600', loopback)).toBe(false);
    expect(originAllowed('http://evil.example:8600', 'evil.example:8600', { ...loopback, loopback: false })).toBe(true);
    expect(originAllowed('https://desk.example', '127.0.0.1:8600', loopback)).toBe(true);
    expect(originAllowed('http://localhost:8600', 'localhost:8600', loopback)).toBe(true);
    expect(originAllowed('http://localhost', 'localhost:80', loopback)).toBe(true);
    expect(originAllowed('null', '127.0.0.1:8600', loopback)).toBe(false);
    expect(originAllowed(undefined, undefined, loopback)).toBe(true);
  });

  test('acknowledgements are limited to sixty a minute from one address', async () => {
    const limited = await start();
    const ask = (): Promise<Response> =>
      fetch(`${limited.url}/api/alarms/none/acknowledge`, {
        method: 'POST',
        headers: { 'content-type': 'application/json' },
        body: JSON.stringify({ by: 'a', note: '' }),
      });
    for (let i = 0; i < 60; i++) expect((await ask()).status).toBe(404);
    await complains(await ask(), 429, 'REQUESTS_TOO_MANY');
    expect((await fetch(`${limited.url}/api/status`)).status).toBe(200);
    await limited.stop();
  });

  test('a wave form comes back bit for bit as a frame, one entry a run', async () => {
    const response = await get(`/api/passages/${passage.id}/waveform`);
    expect(response.headers.get('content-type')).toBe('application/octet-stream');
    const bytes = new Uint8Array(await response.arrayBuffer());
    const { header, data } = decodeFrame(bytes, (utf8) => new TextDecoder().decode(utf8));
    expect(header).toMatchObject({ bridge: 'ottermere', kind: 'record', layout: 'samples' });
    const runs = aWindow(passage).flatMap(({ sensor, runs }) => runs.map((run) => ({ sensor, ...run })));
    expect(header.channels.map(({ sensor, startMicros, stepMicros }) => ({ sensor, startMicros, stepMicros }))).toEqual(
      runs.map(({ sensor, startMicros }) => ({ sensor, startMicros, stepMicros: 2000 })),
    );
    header.channels.forEach(({ at, count }, i) => expect(data.subarray(at, at + count)).toEqual(runs[i]!.samples));
  });

  test('a wave form as CSV reads back to the same float32 values at their times; a gap is an empty field', async () => {
    const response = await get(`/api/passages/${passage.id}/waveform.csv`);
    expect(response.headers.get('content-type')).toContain('text/csv');
    expect(response.headers.get('content-disposition')).toBe(`attachment; filename="${passage.id}.csv"`);
    const [head, ...rows] = (await response.text()).trimEnd().split('\n');
    expect(head).toBe('time,A1 [m/s²],A2 [m/s²],A3 [m/s²],A4 [m/s²]');
    const channels = aWindow(passage);
    const times = new Set(
      channels.flatMap(({ runs }) =>
        runs.flatMap((run) => [...run.samples.keys()].map((i) => run.startMicros + 2000 * i)),
      ),
    );
    expect(rows.length).toBe(times.size);
    const columns = channels.map(() => new Map<string, number>());
    for (const row of rows) {
      const [time, ...values] = row.split(',');
      values.forEach((value, c) => value !== '' && columns[c]!.set(time!, Number(value)));
    }
    channels.forEach(({ runs }, c) => {
      for (const { startMicros, samples } of runs) {
        samples.forEach((value, i) =>
          expect(Math.fround(columns[c]!.get(isoMicros(startMicros + 2000 * i))!)).toBe(value),
        );
      }
    });
  });

  test('the archive file is sent as it is', async () => {
    const response = await get(`/api/passages/${passage.id}/waveform.parquet`);
    expect(response.headers.get('content-type')).toBe('application/vnd.apache.parquet');
    expect((await response.arrayBuffer()).byteLength).toBe(Number(response.headers.get('content-length')));
  });

  test('OpenAPI lists every route of the contract and no other', async () => {
    const document = (await (await get('/api/openapi.json')).json()) as {
      openapi: string;
      paths: Record<string, object>;
    };
    expect(document.openapi).toBe('3.1.0');
    expect(
      Object.entries(document.paths)
        .flatMap(([path, methods]) => Object.keys(methods).map((m) => `${m} ${path}`))
        .sort(),
    ).toEqual(
      [
        'get /api/alarms',
        'get /api/alarms/{alarm}',
        'get /api/bridges',
        'get /api/bridges/{bridge}',
        'get /api/bridges/{bridge}/definition',
        'get /api/bridges/{bridge}/spectra',
        'get /api/days',
        'get /api/errors',
        'get /api/passages',
        'get /api/passages/{passage}',
        'get /api/passages/{passage}/recomputed',
        'get /api/passages/{passage}/waveform',
        'get /api/passages/{passage}/waveform.csv',
        'get /api/passages/{passage}/waveform.parquet',
        'get /api/status',
        'post /api/alarms/{alarm}/acknowledge',
      ].sort(),
    );
    expect(JSON.stringify(document)).toContain('unacknowledged');
  });

  test('metrics are told in the Prometheus text format', async () => {
    const text = await (await get('/metrics')).text();
    expect(text).toContain('spanbeat_bridge_measuring{bridge="ottermere"} 1');
    expect(text).toContain('spanbeat_complaints_total{code="TIME_IN_FUTURE"} 2');
    expect(text).toContain('spanbeat_viewers 0');
    expect(text).toContain('spanbeat_stage_seconds{stage="queue",quantile="0.99"} 0.02');
    expect(text).toContain('spanbeat_workers_heap_bytes 9000000');
    expect(text).not.toContain('stage="tell"'); // nothing came through it yet
  });
});

describe('the pages', () => {
  test('come with a policy that lets nothing in from elsewhere and no script or style in line', async () => {
    const policy = (await get('/')).headers.get('content-security-policy') ?? '';
    expect(policy).toContain("default-src 'self'");
    expect(policy).toContain("connect-src 'self'");
    expect(policy).not.toMatch(/unsafe|https?:|\*/);
    expect((await get('/api/status')).headers.get('x-content-type-options')).toBe('nosniff');
  });

  test('are asked for anew each time, while files with a hash in their name are kept', async () => {
    expect((await get('/')).headers.get('cache-control')).toBe('no-cache');
    const asset = await get('/assets/main-abc123.js');
    expect(asset.headers.get('cache-control')).toBe('public, max-age=31536000, immutable');
    expect(asset.headers.get('content-type')).toContain('javascript');
  });

  test('deep links lead to the client; paths that climb out of its folder do not', async () => {
    for (const path of ['/live/ottermere', '/passages/ottermere?minPeak=2', `/passage/${passage.id}`, '/alarms']) {
      const response = await get(path);
      expect(response.status).toBe(200);
      expect(await response.text()).toContain('<title>page</title>');
    }
    for (const path of ['/..%2f..%2fetc/passwd', '/%2e%2e/%2e%2e/etc/passwd']) {
      expect(await (await get(path)).text()).not.toContain('root:');
    }
    await complains(await get('/live/ottermere', { method: 'PUT' }), 404, 'NOT_FOUND');
  });

  test('that are not built yet say so', async () => {
    const bare = await start({ clientFolder: join(folder, 'missing') });
    await complains(await fetch(bare.url), 404, 'NOT_FOUND');
    await bare.stop();
  });
});

test('a port in use and an address of another machine are said with their codes', async () => {
  const other = createServer();
  await new Promise<void>((resolve) => other.listen(0, '127.0.0.1', resolve));
  const { port } = other.address() as { port: number };
  await expect(start({ port })).rejects.toMatchObject({ code: 'PORT_IN_USE' });
  await expect(start({ host: '192.0.2.1' })).rejects.toMatchObject({ code: 'PORT_REFUSED' });
  await new Promise<unknown>((resolve) => other.close(resolve));
});

test('stopping twice is stopping once, and the port is free after it', async () => {
  const first = await start();
  const port = Number(new URL(first.url).port);
  await Promise.all([first.stop(), first.stop()]);
  const second = await start({ port });
  await second.stop();
});
