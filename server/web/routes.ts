import { createReadStream } from 'node:fs';
import { stat } from 'node:fs/promises';
import { basename } from 'node:path';
import { Readable } from 'node:stream';
import type { FastifyPluginCallbackTypebox } from '@fastify/type-provider-typebox';
import type { FastifyReply } from 'fastify';
import { Type } from 'typebox';
import { Alarm } from '#core/contract/alarm.ts';
import {
  Acknowledgement,
  AlarmQuery,
  ApiComplaint,
  BridgeView,
  Day,
  DayQuery,
  ErrorRow,
  PassagePage,
  PassageQuery,
  PassageView,
  Recomputed,
  SpectraView,
} from '#core/contract/api.ts';
import { csvOfWindow } from '#core/contract/csv-text.ts';
import type { Result } from '#core/contract/errors.ts';
import { BridgeStatus, SystemStatus } from '#core/contract/status.ts';
import type { Backend, StoredWaveform } from './backend.ts';
import { answerComplaint } from './complaint.ts';
import { principalOf } from './principal.ts';
import { waveformFrame } from './waveform.ts';

/** POST requests a minute from one address. */
const POSTS_A_MINUTE = 60;
/** Days of one question. */
const LIMIT_DAYS = 400;

const OfBridge = Type.Object({ bridge: Type.String({ maxLength: 64 }) });
const OfPassage = Type.Object({ passage: Type.String({ maxLength: 128 }) });
const OfAlarm = Type.Object({ alarm: Type.String({ maxLength: 256 }) });
const OneSensor = Type.Object(
  { sensor: Type.Optional(Type.String({ maxLength: 64 })) },
  { additionalProperties: false },
);
const OneVersion = Type.Object(
  { version: Type.Optional(Type.Integer({ minimum: 1 })) },
  { additionalProperties: false },
);

/** A JSON answer of this shape, or a complaint. */
const answers = <T extends Parameters<typeof Type.Array>[0]>(
  summary: string,
  shape: T,
): { summary: string; response: { 200: T; default: typeof ApiComplaint } } => ({
  summary,
  response: { 200: shape, default: ApiComplaint },
});

/** An answer that is no JSON. */
const sends = (summary: string, produces: string): { summary: string; produces: string[] } => ({
  summary,
  produces: [produces],
});

/** All routes under /api, see the head of the contract's api.ts. */
export const routes: FastifyPluginCallbackTypebox<{ backend: Backend }> = (app, { backend }, done) => {
  app.get('/status', { schema: answers('How everything stands', SystemStatus) }, () => backend.systemStatus());
  app.get('/bridges', { schema: answers('How each bridge stands', Type.Array(BridgeStatus)) }, () => backend.bridges());
  app.get('/errors', { schema: answers('Complaints by code', Type.Array(ErrorRow)) }, () => backend.errors());

  app.get(
    '/bridges/:bridge',
    { schema: { ...answers('One bridge: definition, sensors, bands', BridgeView), params: OfBridge } },
    async ({ params }, reply) => backend.bridge(params.bridge) ?? missing(reply, 'bridge', params.bridge),
  );
  app.get(
    '/bridges/:bridge/definition',
    { schema: { ...sends('The definition as it was given', 'text/yaml'), params: OfBridge, querystring: OneVersion } },
    ({ params, query }, reply) => {
      const text = backend.definitionText(params.bridge, query.version);
      if (text === null) return missing(reply, 'definition', params.bridge);
      return reply.type('text/yaml; charset=utf-8').send(text);
    },
  );
  app.get(
    '/bridges/:bridge/spectra',
    {
      schema: { ...answers('Rolling spectra of the last hour', SpectraView), params: OfBridge, querystring: OneSensor },
    },
    async ({ params, query }, reply) =>
      backend.spectra(params.bridge, query.sensor) ?? missing(reply, 'spectrum', params.bridge),
  );
  app.get(
    '/days',
    { schema: { ...answers('Passages day by day', Type.Array(Day)), querystring: DayQuery } },
    async ({ query }, reply) => {
      const refusal = refusedDays(query);
      if (refusal !== null) return answerComplaint(reply, { code: 'REQUEST_INVALID', where: 'days', detail: refusal });
      return resultOf(reply, await backend.days(query));
    },
  );
  passageRoutes(app, backend);
  alarmRoutes(app, backend);
  done();
};

type App = Parameters<typeof routes>[0];

function passageRoutes(app: App, backend: Backend): void {
  app.get(
    '/passages',
    { schema: { ...answers('Passages, filtered and in pages', PassagePage), querystring: PassageQuery } },
    ({ query }) => backend.passages(query),
  );
  app.get(
    '/passages/:passage',
    { schema: { ...answers('One passage', PassageView), params: OfPassage } },
    async ({ params }, reply) => (await backend.passage(params.passage)) ?? missing(reply, 'passage', params.passage),
  );
  app.get(
    '/passages/:passage/recomputed',
    { schema: { ...answers('The passage computed again from its wave form', Recomputed), params: OfPassage } },
    async ({ params }, reply) => resultOf(reply, await backend.recomputed(params.passage)),
  );
  app.get(
    '/passages/:passage/waveform',
    { schema: { ...sends('Wave form as a binary frame', 'application/octet-stream'), params: OfPassage } },
    async ({ params }, reply) => {
      const waveform = await backend.waveform(params.passage);
      if (waveform === null) return missing(reply, 'wave form', params.passage);
      return reply.type('application/octet-stream').send(Buffer.from(waveformFrame(waveform).buffer));
    },
  );
  app.get(
    '/passages/:passage/waveform.csv',
    { schema: { ...sends('Wave form as CSV', 'text/csv'), params: OfPassage, querystring: OneSensor } },
    async ({ params, query }, reply) => {
      const waveform = await backend.waveform(params.passage);
      if (waveform === null) return missing(reply, 'wave form', params.passage);
      const channels = wanted(waveform, query.sensor);
      if (channels.length === 0) return missing(reply, 'sensor', query.sensor ?? '');
      return asFile(reply, 'text/csv; charset=utf-8; header=present', `${params.passage}.csv`).send(
        Readable.from(csvOfWindow(waveform.definition, channels), { objectMode: false }),
      );
    },
  );
  app.get(
    '/passages/:passage/waveform.parquet',
    { schema: { ...sends('Wave form as Parquet', 'application/vnd.apache.parquet'), params: OfPassage } },
    async ({ params }, reply) => {
      const path = await backend.waveformFile(params.passage);
      if (path === null) return missing(reply, 'wave form', params.passage);
      const { size } = await stat(path);
      return asFile(reply, 'application/vnd.apache.parquet', basename(path))
        .header('content-length', size)
        .send(createReadStream(path));
    },
  );
}

function alarmRoutes(app: App, backend: Backend): void {
  app.get(
    '/alarms',
    { schema: { ...answers('Alarms, newest first', Type.Array(Alarm)), querystring: AlarmQuery } },
    ({ query }) => backend.alarms(query),
  );
  app.get(
    '/alarms/:alarm',
    { schema: { ...answers('One alarm with its steps', Alarm), params: OfAlarm } },
    async ({ params }, reply) => (await backend.alarm(params.alarm)) ?? missing(reply, 'alarm', params.alarm),
  );
  app.post(
    '/alarms/:alarm/acknowledge',
    {
      schema: { ...answers('Acknowledges an alarm', Alarm), params: OfAlarm, body: Acknowledgement },
      config: { rateLimit: { max: POSTS_A_MINUTE, timeWindow: 60_000 } },
    },
    async (request, reply) => {
      const { params, body } = request;
      return resultOf(reply, await backend.acknowledge(params.alarm, body, principalOf(request)));
    },
  );
}

const missing = (reply: FastifyReply, what: string, id: string): FastifyReply =>
  answerComplaint(reply, { code: 'NOT_FOUND', where: id.slice(0, 128), detail: `no ${what} of this id` });

const resultOf = <T>(reply: FastifyReply, result: Result<T>): T | FastifyReply =>
  result.ok ? result.value : answerComplaint(reply, result.complaint);

const wanted = ({ channels }: StoredWaveform, sensor: string | undefined): StoredWaveform['channels'] =>
  sensor === undefined ? channels : channels.filter((channel) => channel.sensor === sensor);

const asFile = (reply: FastifyReply, type: string, name: string): FastifyReply =>
  reply.type(type).header('content-disposition', `attachment; filename="${name.replaceAll(/[^\w.-]/g, '_')}"`);

/** Why a question for days cannot be answered, or null. */
function refusedDays({ from, to }: DayQuery): string | null {
  const [first, last] = [Date.parse(`${from}T00:00:00Z`), Date.parse(`${to}T00:00:00Z`)];
  if (Number.isNaN(first) || Number.isNaN(last)) return `${Number.isNaN(first) ? from : to} is no day of the calendar`;
  const days = (last - first) / 86_400_000 + 1;
  if (days < 1) return `${to} is before ${from}`;
  return days > LIMIT_DAYS ? `${days} days, expected ${LIMIT_DAYS} or fewer` : null;
}
