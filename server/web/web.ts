import fastifyRateLimit from '@fastify/rate-limit';
import fastifySwagger from '@fastify/swagger';
import type { TypeBoxTypeProvider } from '@fastify/type-provider-typebox';
import Fastify, { LogController, type FastifyBaseLogger, type FastifyError, type FastifyInstance } from 'fastify';
import type { AddressInfo } from 'node:net';
import { Value } from 'typebox/value';
import { SpanbeatError, type Complaint } from '#core/contract/errors.ts';
import type { TSchema } from 'typebox';
import type { Backend } from './backend.ts';
import { answerComplaint, answerError, compileCheck } from './complaint.ts';
import { pastColumnMicros } from './envelopes.ts';
import { createLive, refuse, type Live, type LiveLimits } from './live.ts';
import { createMetrics } from './metrics.ts';
import { isLoopback, originAllowed, type OriginRule } from './origin.ts';
import { routes } from './routes.ts';
import { serveClient, setPolicy } from './site.ts';

export interface WebOptions {
  backend: Backend;
  /** Folder of the built client. */
  clientFolder: string;
  host: string;
  /** 0 for any free one. */
  port: number;
  /** Origins of pages beside our own that may act and look on. */
  allowedOrigins?: readonly string[];
  /** Channels of all bridges, for the memory of the live past. */
  channels: number;
  report: (complaint: Complaint) => void;
  logger?: FastifyBaseLogger;
  version: string;
  limits?: Partial<LiveLimits>;
  /** Checks each answer against its schema before it leaves; for tests. */
  checkAnswers?: boolean;
}

export interface Web {
  url: string;
  live: Live;
  /** Idempotent; open sockets are told goodbye and cut. */
  stop(): Promise<void>;
}

/** The largest request body: an acknowledgement with its note. */
const LIMIT_BODY = 64 * 1024;

/** @throws SpanbeatError PORT_IN_USE, PORT_REFUSED */
export async function startWeb(options: WebOptions): Promise<Web> {
  const { backend, host, port, report, channels, limits, allowedOrigins = [] } = options;
  const origins: OriginRule = { allowed: allowedOrigins, loopback: isLoopback(host) };
  const live = createLive({
    backend,
    origins,
    report,
    pastMicros: pastColumnMicros(channels),
    ...(limits === undefined ? {} : { limits }),
  });
  try {
    const app = await buildApp(options, live, origins);
    app.server.on('upgrade', (request, socket, head) => {
      if (request.url?.split('?')[0] === '/live') {
        live.upgrade(request, socket, head);
        return;
      }
      refuse(socket, 404, {
        code: 'NOT_FOUND',
        where: String(request.url).slice(0, 200),
        detail: 'the socket is /live',
      });
    });
    await listen(app, host, port);
    return { url: addressOf(app), live, stop: stopper(app, live) };
  } catch (failure) {
    await live.close();
    throw failure;
  }
}

async function buildApp(options: WebOptions, live: Live, origins: OriginRule): Promise<FastifyInstance> {
  const { backend, report, logger, clientFolder, version, checkAnswers = false } = options;
  const app = Fastify({
    bodyLimit: LIMIT_BODY,
    forceCloseConnections: true,
    routerOptions: { maxParamLength: 256 },
    ...(logger === undefined
      ? {}
      : { loggerInstance: logger, logController: new LogController({ disableRequestLogging: true }) }),
  }).withTypeProvider<TypeBoxTypeProvider>();
  app.setValidatorCompiler<TSchema>(compileCheck);
  app.setSerializerCompiler(({ schema, url }) => (answer) => {
    if (checkAnswers) assertAnswer(schema, answer, url);
    return JSON.stringify(answer);
  });
  app.setErrorHandler((error: FastifyError, request, reply) => answerError(error, request, reply, report));
  app.addHook('onRequest', async (request, reply) => {
    if (request.method === 'GET' || request.method === 'HEAD') return;
    if (originAllowed(request.headers.origin, request.headers.host, origins)) return;
    const complaint: Complaint = { code: 'ORIGIN_REFUSED', where: String(request.headers.origin), detail: 'refused' };
    report(complaint);
    await answerComplaint(reply, complaint);
  });
  await setPolicy(app);
  await app.register(fastifyRateLimit, { global: false });
  await app.register(fastifySwagger, {
    openapi: {
      openapi: '3.1.0',
      info: {
        title: 'Spanbeat',
        version,
        description:
          'What instrumented railway bridges do under each train. Advisory: limits come from the local code and the ' +
          'responsible licensed engineer. The live socket is /live.',
      },
      components: {},
    },
  });
  await app.register(routes, { prefix: '/api', backend });
  app.get('/api/openapi.json', { schema: { hide: true } }, () => app.swagger());
  const metrics = createMetrics(backend, () => ({ ...live.figures(), viewers: live.viewers() }));
  app.get('/metrics', { schema: { hide: true } }, async (_, reply) =>
    reply.type(metrics.contentType).send(await metrics.metrics()),
  );
  await serveClient(app, clientFolder);
  return app;
}

function assertAnswer(schema: TSchema, answer: unknown, url: string): void {
  if (Value.Check(schema, answer)) return;
  const [first] = Value.Errors(schema, answer);
  throw new Error(`answer of ${url} does not fit its schema: ${first?.instancePath ?? ''} ${first?.message ?? ''}`);
}

async function listen(app: FastifyInstance, host: string, port: number): Promise<void> {
  try {
    await app.listen({ host, port });
  } catch (failure) {
    await app.close();
    const code = failure instanceof Error && 'code' in failure ? failure.code : undefined;
    const where = `${host}:${port}`;
    if (code === 'EADDRINUSE') {
      throw new SpanbeatError({ code: 'PORT_IN_USE', where, detail: 'the page cannot listen' });
    }
    if (code === 'EACCES' || code === 'EADDRNOTAVAIL' || code === 'ENOTFOUND') {
      throw new SpanbeatError({ code: 'PORT_REFUSED', where, detail: `the system answers ${code}` });
    }
    throw failure;
  }
}

function addressOf(app: FastifyInstance): string {
  const { address, port, family } = app.server.address() as AddressInfo;
  const anywhere = address === '0.0.0.0' || address === '::';
  const name = anywhere ? 'localhost' : family === 'IPv6' ? `[${address}]` : address;
  return `http://${name}:${port}`;
}

function stopper(app: FastifyInstance, live: Live): () => Promise<void> {
  let stopping: Promise<void> | null = null;
  return () => (stopping ??= live.close().then(() => app.close()));
}
