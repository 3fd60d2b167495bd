import type { IncomingMessage } from 'node:http';
import type { Duplex } from 'node:stream';
import { randomUUID } from 'node:crypto';
import { Compile } from 'typebox/compile';
import { WebSocketServer, type RawData, type WebSocket } from 'ws';
import type { Alarm } from '#core/contract/alarm.ts';
import type { Complaint, ErrorCode } from '#core/contract/errors.ts';
import type { SensorHealth } from '#core/contract/health.ts';
import { CLOSE, LIVE_VERSION, VIEWER_MESSAGES, ViewerMessage, type ServerMessage } from '#core/contract/live.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { AxleEvent, LiveSamples, PassageProgress, SpectrumLine } from '#core/contract/pipeline.ts';
import { showFound } from '#core/contract/schema-words.ts';
import { fieldName, isMap, shapeProblems } from '#core/contract/shape.ts';
import type { Backend } from './backend.ts';
import { bodyOf, LIMIT_DETAIL } from './complaint.ts';
import {
  addSamples,
  beginServing,
  createEnvelopes,
  nextFrame,
  pastFrame,
  type Envelopes,
  type Served,
} from './envelopes.ts';
import { originAllowed, type OriginRule } from './origin.ts';
import { createViewer, sharedText, VIEWER_LIMITS, type SharedText, type Viewer, type ViewerLimits } from './viewers.ts';

export interface LiveOptions {
  backend: Backend;
  origins: OriginRule;
  report: (complaint: Complaint) => void;
  /** Width in which the past is kept, see `pastColumnMicros`. */
  pastMicros: number;
  limits?: Partial<LiveLimits>;
}

export interface LiveLimits extends ViewerLimits {
  viewers: number;
  messageBytes: number;
  flushMs: number;
}

const LIMITS: LiveLimits = { ...VIEWER_LIMITS, viewers: 100, messageBytes: 4096, flushMs: 100 };
const STATUS_MS = 1_000;
const PING_MS = 15_000;

export interface LiveFigures {
  framesSent: number;
  framesSkipped: number;
  viewersDropped: number;
  malformed: number;
}

/** What the program tells the pages that look on. Each call is encoded once, however many they are. */
export interface Live {
  samples(list: readonly LiveSamples[]): void;
  alarm(alarm: Alarm): void;
  passage(passage: Passage): void;
  progress(progress: PassageProgress): void;
  /** Axles, spectra and health go to the pages that watch the bridge. */
  axles(axles: readonly AxleEvent[]): void;
  spectrum(line: SpectrumLine): void;
  health(bridge: string, sensors: readonly SensorHealth[]): void;
  viewers(): number;
  figures(): LiveFigures;
  /** Takes an HTTP upgrade of the path /live. */
  upgrade(request: IncomingMessage, socket: Duplex, head: Buffer): void;
  /** Says goodbye to all. Idempotent. */
  close(): Promise<void>;
}

/** Viewers that see the same columns; a frame is encoded once for all of them. */
interface Group {
  envelopes: Envelopes;
  columnMicros: number;
  sensors: readonly string[] | null;
  served: Served;
  members: Set<Seat>;
}

interface Seat {
  viewer: Viewer;
  group: Group | null;
  /** When it was last shown a frame, to know how much it missed. */
  shownMs: number;
  alive: boolean;
}

const viewerMessage = Compile(ViewerMessage);

export function createLive({ backend, origins, report, pastMicros, limits: given }: LiveOptions): Live {
  const limits: LiveLimits = { ...LIMITS, ...given };
  const run = randomUUID();
  const sockets = new WebSocketServer({ noServer: true, maxPayload: limits.messageBytes, perMessageDeflate: false });
  const seats = new Set<Seat>();
  const groups = new Map<string, Group>();
  const bridges = new Map<string, Envelopes>();
  const figures: LiveFigures = { framesSent: 0, framesSkipped: 0, viewersDropped: 0, malformed: 0 };
  let closing: Promise<void> | null = null;

  const envelopesOf = (bridge: string): Envelopes => {
    let envelopes = bridges.get(bridge);
    if (envelopes === undefined) bridges.set(bridge, (envelopes = createEnvelopes(bridge, pastMicros)));
    return envelopes;
  };
  const tellAll = (text: SharedText): void => {
    for (const { viewer } of seats) viewer.tell(text);
  };
  const tellWatchers = (bridge: string, key: string, message: () => ServerMessage): void => {
    const watchers = [...seats].filter(({ group }) => group?.envelopes.bridge === bridge);
    if (watchers.length === 0) return;
    const text = sharedText(key, message());
    for (const { viewer } of watchers) viewer.tell(text);
  };

  const show = (seat: Seat, bytes: Uint8Array, nowMs: number): void => {
    if (seat.viewer.show(bytes) === 'sent') {
      figures.framesSent += 1;
      seat.shownMs = nowMs;
    } else figures.framesSkipped += 1;
  };
  const flush = (): void => {
    const nowMs = performance.now();
    for (const group of groups.values()) {
      const bytes = nextFrame(group.envelopes, group.columnMicros, group.sensors, group.served);
      for (const seat of group.members) {
        if (seat.viewer.tend(nowMs)) catchUp(seat, group, nowMs);
        else if (bytes !== null) show(seat, bytes, nowMs);
      }
    }
    for (const seat of seats) if (seat.group === null) seat.viewer.tend(nowMs);
  };
  /** What a viewer missed while it was slow comes in columns four times as wide. */
  const catchUp = (seat: Seat, { envelopes, columnMicros, sensors, served }: Group, nowMs: number): void => {
    const missedMicros = Math.ceil(nowMs - seat.shownMs + limits.flushMs) * 1000;
    const bytes = pastFrame(envelopes, columnMicros, sensors, served, missedMicros, 4);
    if (bytes !== null) show(seat, bytes, nowMs);
  };

  const leave = (seat: Seat): void => {
    const { group } = seat;
    if (group === null) return;
    seat.group = null;
    group.members.delete(seat);
    if (group.members.size === 0) for (const [key, other] of groups) if (other === group) groups.delete(key);
  };
  const watch = (seat: Seat, wish: Extract<ViewerMessage, { type: 'watch' }>): void => {
    if (!backend.bridges().some(({ id }) => id === wish.bridge)) {
      misspoke(seat, 'NOT_FOUND', `no bridge "${wish.bridge}"`);
      return;
    }
    leave(seat);
    const sensors = wish.sensors === undefined ? null : [...new Set(wish.sensors)].sort();
    const key = JSON.stringify([wish.bridge, wish.columnMicros, sensors]);
    let group = groups.get(key);
    if (group === undefined) {
      const envelopes = envelopesOf(wish.bridge);
      const served = beginServing(envelopes, wish.columnMicros, sensors);
      group = { envelopes, columnMicros: wish.columnMicros, sensors, served, members: new Set() };
      groups.set(key, group);
    }
    group.members.add(seat);
    seat.group = group;
    const pastMicros = (wish.pastS ?? 0) * 1_000_000;
    const past =
      pastMicros > 0 ? pastFrame(group.envelopes, group.columnMicros, sensors, group.served, pastMicros) : null;
    seat.shownMs = performance.now();
    if (past !== null) show(seat, past, seat.shownMs);
    const view = backend.bridge(wish.bridge);
    if (view !== null) seat.viewer.tell(sharedText('health', healthMessage(wish.bridge, view.sensors)));
  };

  const misspoke = (seat: Seat, code: ErrorCode, detail: string): void => {
    figures.malformed += 1;
    const complaint: Complaint = { code, where: 'live', detail };
    report(complaint);
    const body = bodyOf(complaint);
    seat.viewer.tell(sharedText(`complaint ${body.code}`, { type: 'complaint', ...body } satisfies ServerMessage));
    seat.viewer.misspoke();
  };
  const hear = (seat: Seat, data: RawData, binary: boolean): void => {
    if (!seat.viewer.heard(performance.now())) {
      misspoke(seat, 'REQUEST_INVALID', `more than ${limits.messagesPerSecond} messages in a second`);
      return;
    }
    const message = binary ? undefined : parsed(data);
    if (!viewerMessage.Check(message)) {
      misspoke(seat, 'REQUEST_INVALID', misunderstood(message));
      return;
    }
    if (message.type === 'watch') watch(seat, message);
    else leave(seat);
  };

  const welcome = (socket: WebSocket): void => {
    // Told by the close that follows it.
    socket.on('error', () => undefined);
    if (seats.size >= limits.viewers) {
      report({ code: 'VIEWERS_TOO_MANY', detail: `${limits.viewers} viewers are connected` });
      socket.close(CLOSE.tooMany, `the limit of ${limits.viewers} viewers is reached`);
      return;
    }
    const viewer = createViewer(socket, limits, (reason) => {
      figures.viewersDropped += 1;
      report({ code: 'VIEWER_SLOW', detail: reason });
    });
    const seat: Seat = { viewer, group: null, shownMs: performance.now(), alive: true };
    seats.add(seat);
    socket.on('message', (data, binary) => hear(seat, data, binary));
    socket.on('pong', () => (seat.alive = true));
    socket.on('close', () => {
      leave(seat);
      seats.delete(seat);
    });
    const hello: ServerMessage = {
      type: 'hello',
      version: LIVE_VERSION,
      run,
      nowMicros: backend.nowMicros(),
      status: backend.systemStatus(),
      alarms: backend.openAlarms(),
    };
    viewer.tell(sharedText('hello', hello));
  };

  const flushing = setInterval(flush, limits.flushMs);
  const telling = setInterval(() => {
    if (seats.size === 0) return;
    const nowMicros = backend.nowMicros();
    tellAll(
      sharedText('status', { type: 'status', nowMicros, status: backend.systemStatus() } satisfies ServerMessage),
    );
    // With the status, so that both name the same newest sample. A silent sensor is told by this alone: it says nothing itself.
    const watched = new Set([...seats].flatMap(({ group }) => group?.envelopes.bridge ?? []));
    for (const bridge of watched) {
      const view = backend.bridge(bridge);
      if (view !== null) tellWatchers(bridge, 'health', () => healthMessage(bridge, view.sensors));
    }
  }, STATUS_MS);
  const pinging = setInterval(() => {
    for (const seat of seats) {
      if (!seat.alive) seat.viewer.socket.terminate();
      seat.alive = false;
      seat.viewer.socket.ping();
    }
  }, PING_MS);

  return {
    samples(list) {
      for (const samples of list) addSamples(envelopesOf(samples.bridge), samples);
    },
    alarm: (alarm) => tellAll(sharedText(`alarm ${alarm.id}`, { type: 'alarm', alarm } satisfies ServerMessage)),
    passage: (passage) =>
      tellAll(sharedText(`passage ${passage.id}`, { type: 'passage', passage } satisfies ServerMessage)),
    progress: (progress) => {
      const message: ServerMessage = { type: 'progress', ...progress };
      tellAll(sharedText(`progress ${progress.passage} ${progress.kind}`, message));
    },
    axles(axles) {
      for (const [bridge, own] of Map.groupBy(axles, (axle) => axle.bridge)) {
        const first = own[0]!;
        tellWatchers(bridge, `axles ${first.sensor} ${first.micros}`, () => ({
          type: 'axles',
          bridge,
          axles: own.map(({ passage, sensor, micros, alongM, speedMs }) => ({
            passage,
            sensor,
            micros,
            alongM,
            speedMs,
          })),
        }));
      }
    },
    spectrum: (line) =>
      tellWatchers(line.bridge, `spectrum ${line.sensor}`, () => ({ type: 'spectrum', ...line, psd: [...line.psd] })),
    health: (bridge, sensors) => tellWatchers(bridge, 'health', () => healthMessage(bridge, sensors)),
    viewers: () => seats.size,
    figures: () => ({ ...figures }),
    upgrade(request, socket, head) {
      if (closing !== null) {
        refuse(socket, 503, { code: 'SERVER_FAULT', detail: 'the server is stopping' });
        return;
      }
      const { origin, host } = request.headers;
      if (!originAllowed(origin, host, origins)) {
        const complaint: Complaint = { code: 'ORIGIN_REFUSED', where: String(origin).slice(0, 200), detail: 'refused' };
        report(complaint);
        refuse(socket, 403, complaint);
        return;
      }
      sockets.handleUpgrade(request, socket, head, welcome);
    },
    close() {
      closing ??= (async () => {
        for (const timer of [flushing, telling, pinging]) clearInterval(timer);
        const left = [...seats].map(
          ({ viewer }) => new Promise<void>((resolve) => viewer.socket.once('close', () => resolve())),
        );
        for (const { viewer } of seats) viewer.drop(CLOSE.shutdown, 'the server is stopping');
        await Promise.all(left);
        await new Promise<void>((resolve) => sockets.close(() => resolve()));
      })();
      return closing;
    },
  };
}

const healthMessage = (bridge: string, sensors: readonly SensorHealth[]): ServerMessage => ({
  type: 'health',
  bridge,
  sensors: [...sensors],
});

function parsed(data: RawData): unknown {
  try {
    return JSON.parse((data as Buffer).toString('utf8'));
  } catch {
    return undefined; // no JSON; the caller complains
  }
}

/** What is wrong in a message from a viewer. */
function misunderstood(message: unknown): string {
  if (!isMap(message)) return 'expected a map in JSON text, of type "watch" or "unwatch"';
  const { type } = message;
  if (type !== 'watch' && type !== 'unwatch') return `type: found ${showFound(type)}, expected "watch" or "unwatch"`;
  return shapeProblems(VIEWER_MESSAGES[type], message)
    .problems.map(({ path, detail }) => `${fieldName(path, type)}: ${detail}`)
    .join('; ')
    .slice(0, LIMIT_DETAIL);
}

/** Answers an upgrade that is not taken, as every other route answers. */
export function refuse(socket: Duplex, status: 403 | 404 | 503, complaint: Complaint): void {
  const body = JSON.stringify(bodyOf(complaint));
  const words = { 403: 'Forbidden', 404: 'Not Found', 503: 'Service Unavailable' }[status];
  socket.on('error', () => undefined); // gone already: nobody to tell
  socket.end(
    `HTTP/1.1 ${status} ${words}\r\ncontent-type: application/json; charset=utf-8\r\n` +
      `content-length: ${Buffer.byteLength(body)}\r\nconnection: close\r\n\r\n${body}`,
  );
}
