import fastifyHelmet from '@fastify/helmet';
import fastifyStatic from '@fastify/static';
import type { FastifyInstance } from 'fastify';
import { existsSync } from 'node:fs';
import { join, sep } from 'node:path';
import { answerComplaint } from './complaint.ts';

/**
 * What a page may do. Everything comes from this server. Pictures may also be `data:`: a plot is saved as PNG by way of an
 * SVG picture that the page makes itself.
 */
const POLICY = {
  defaultSrc: ["'self'"],
  scriptSrc: ["'self'"],
  styleSrc: ["'self'"],
  fontSrc: ["'self'"],
  connectSrc: ["'self'"],
  imgSrc: ["'self'", 'data:'],
  objectSrc: ["'none'"],
  baseUri: ["'none'"],
  formAction: ["'self'"],
  frameAncestors: ["'none'"],
} as const;

export async function setPolicy(app: FastifyInstance): Promise<void> {
  await app.register(fastifyHelmet, {
    contentSecurityPolicy: {
      useDefaults: false,
      directives: Object.fromEntries(Object.entries(POLICY).map(([name, sources]) => [name, [...sources]])),
    },
    // Served as plain HTTP on this machine; a proxy that adds TLS adds this too.
    strictTransportSecurity: false,
    xFrameOptions: { action: 'deny' },
    referrerPolicy: { policy: 'no-referrer' },
  });
}

/** Paths that are never a page. */
const NOT_PAGES = /^\/(api|metrics|assets)(\/|$|\?)/;

/**
 * The built client. Files under /assets carry a hash in their names and are kept by browsers; the page itself is asked for
 * anew each time. A path that is no file is a place in the client (deep link), unless it belongs to the API.
 */
export async function serveClient(app: FastifyInstance, folder: string): Promise<void> {
  const built = existsSync(join(folder, 'index.html'));
  if (built) {
    await app.register(fastifyStatic, {
      root: folder,
      cacheControl: false,
      setHeaders(reply, path) {
        const lasting = path.includes(`${sep}assets${sep}`);
        reply.header('cache-control', lasting ? 'public, max-age=31536000, immutable' : 'no-cache');
      },
    });
  }
  app.setNotFoundHandler((request, reply) => {
    const page = (request.method === 'GET' || request.method === 'HEAD') && !NOT_PAGES.test(request.url);
    if (page && built) return reply.sendFile('index.html');
    const detail = page ? 'the pages are not built; run "npm run build"' : `nothing answers ${request.method} here`;
    return answerComplaint(reply, { code: 'NOT_FOUND', where: request.url.slice(0, 200), detail });
  });
}
