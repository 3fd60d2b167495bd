import { decodeFrame, type Frame } from '#core/contract/frame.ts';
import { CLOSE, COLUMN_MICROS, LIVE_VERSION, type ServerMessage } from '#core/contract/live.ts';

/** What of the browser's WebSocket is used, so that tests can hand in their own. */
export interface Socket {
  binaryType: string;
  onopen: (() => void) | null;
  onmessage: ((event: { data: unknown }) => void) | null;
  onclose: ((event: { code: number; reason: string }) => void) | null;
  send(text: string): void;
  close(): void;
}

/** The rim: clock, timers and chance come in from outside. */
export interface LinkRim {
  open: () => Socket;
  /** Milliseconds of a clock that never steps back. */
  now: () => number;
  /** Calls back once after so many milliseconds; the returned function calls it off. */
  after: (milliseconds: number, call: () => void) => () => void;
  /** Even between 0 and 1. */
  chance: () => number;
}

export type LinkState =
  /** Opened, nothing said yet. */
  | { kind: 'connecting'; attempt: number }
  | { kind: 'live' }
  /** Open, but no sign of life for longer than STALE_MS. */
  | { kind: 'stale'; sinceMs: number }
  | { kind: 'lost'; sinceMs: number; retryAtMs: number; attempt: number; reason: string }
  /** The server speaks another version of the contract: the page must be loaded again. */
  | { kind: 'other version'; theirs: number };

export interface LinkListener {
  message: (message: ServerMessage) => void;
  frame: (frame: Frame) => void;
  state: (state: LinkState) => void;
  /** The server runs anew: what it said before may no longer hold. Comes before the hello itself. */
  restarted: () => void;
  /** A message that could not be understood; it is dropped. */
  garbled: (why: string) => void;
}

/** What is asked of the live push; see ViewerMessage of the contract. */
export interface Watch {
  bridge: string;
  columnMicros: (typeof COLUMN_MICROS)[number];
  sensors?: readonly string[];
  pastS?: number;
}

export interface Link {
  watch(watch: Watch): void;
  unwatch(): void;
  /** Tries again now rather than when the wait is over. */
  retry(): void;
  readonly state: LinkState;
  close(): void;
}

/** The server gives a sign of life each second; three missed ones are told. */
export const STALE_MS = 3_000;
/** No sign of life for this long: the line is taken as dead and opened anew. */
const DEAD_MS = 10_000;
const FIRST_WAIT_MS = 500;
const LONGEST_WAIT_MS = 15_000;

/** Wait before attempt n (from 1): doubling with a limit, and up to a half less by chance so that viewers don't come all at once. */
export function waitMs(attempt: number, chance: number): number {
  const whole = Math.min(LONGEST_WAIT_MS, FIRST_WAIT_MS * 2 ** Math.min(attempt - 1, 10));
  return Math.round(whole * (1 - chance / 2));
}

/** A line to the server that is opened again whenever it breaks, and remembers what was watched. */
export function openLink(rim: LinkRim, listener: LinkListener): Link {
  let socket: Socket | null = null;
  let state: LinkState = { kind: 'connecting', attempt: 0 };
  let attempt = 0;
  let run: string | null = null;
  let watching: (Watch & { type: 'watch' }) | null = null;
  let heardMs = rim.now();
  let isOpen = false;
  let closed = false;
  let endRetry = (): void => {};
  let endPulse = (): void => {};

  const enter = (next: LinkState): void => {
    state = next;
    listener.state(next);
  };

  const connect = (): void => {
    endRetry();
    if (closed) return;
    heardMs = rim.now();
    isOpen = false;
    const mine = rim.open();
    socket = mine;
    mine.binaryType = 'arraybuffer';
    mine.onopen = () => {
      if (mine !== socket) return;
      isOpen = true;
      heardMs = rim.now();
      if (watching) mine.send(JSON.stringify(watching));
    };
    mine.onmessage = ({ data }) => {
      if (mine === socket) receive(data);
    };
    mine.onclose = ({ code, reason }) => {
      if (mine === socket) lost(code, reason);
    };
    pulse();
  };

  const receive = (data: unknown): void => {
    heardMs = rim.now();
    if (data instanceof ArrayBuffer) {
      const frame = parsed(() => decodeFrame(new Uint8Array(data), utf8), listener);
      if (frame) listener.frame(frame);
      return;
    }
    const message = parsed(() => JSON.parse(String(data)) as ServerMessage, listener);
    if (!message) return;
    if (message.type === 'hello') {
      if (message.version !== LIVE_VERSION) {
        stop(message.version);
        return;
      }
      if (run !== null && run !== message.run) listener.restarted();
      run = message.run;
      attempt = 0;
    }
    if (state.kind !== 'live') enter({ kind: 'live' });
    listener.message(message);
  };

  const lost = (code: number, reason: string): void => {
    socket = null;
    isOpen = false;
    endPulse();
    if (closed || state.kind === 'other version') return;
    if (code === CLOSE.version) {
      stop(0);
      return;
    }
    attempt += 1;
    const wait = waitMs(attempt, rim.chance());
    const since = state.kind === 'lost' || state.kind === 'stale' ? state.sinceMs : rim.now();
    lostSinceMs ??= since;
    enter({ kind: 'lost', sinceMs: lostSinceMs, retryAtMs: rim.now() + wait, attempt, reason: reasonOf(code, reason) });
    endRetry = rim.after(wait, connect);
  };
  let lostSinceMs: number | null = null;

  const stop = (theirs: number): void => {
    enter({ kind: 'other version', theirs });
    endPulse();
    socket?.close();
    socket = null;
  };

  /** Looks once a second whether the server still speaks. */
  const pulse = (): void => {
    endPulse();
    endPulse = rim.after(1000, () => {
      const silentMs = rim.now() - heardMs;
      if (silentMs > DEAD_MS) {
        const dead = socket;
        socket = null;
        dead?.close();
        lost(1006, isOpen ? 'no sign of life' : 'no answer');
        return;
      }
      if (isOpen && silentMs > STALE_MS && state.kind === 'live') enter({ kind: 'stale', sinceMs: heardMs });
      pulse();
    });
    if (state.kind === 'live') lostSinceMs = null;
  };

  connect();
  return {
    watch(watch) {
      watching = { type: 'watch', ...watch };
      if (isOpen) socket?.send(JSON.stringify(watching));
    },
    unwatch() {
      watching = null;
      if (isOpen) socket?.send(JSON.stringify({ type: 'unwatch' }));
    },
    retry() {
      if (state.kind === 'lost' && socket === null) connect();
    },
    get state() {
      return state;
    },
    close() {
      closed = true;
      endRetry();
      endPulse();
      const last = socket;
      socket = null;
      last?.close();
    },
  };
}

const decoder = new TextDecoder();
const utf8 = (bytes: Uint8Array): string => decoder.decode(bytes);

function parsed<T>(parse: () => T, listener: LinkListener): T | null {
  try {
    return parse();
  } catch (error) {
    listener.garbled(error instanceof Error ? error.message : String(error));
    return null;
  }
}

function reasonOf(code: number, reason: string): string {
  if (reason !== '') return reason;
  if (code === CLOSE.shutdown) return 'the server was stopped';
  if (code === CLOSE.slow) return 'this page could not keep up';
  if (code === CLOSE.tooMany) return 'the server has its limit of viewers';
  return 'the connection broke';
}

/** The browser's own rim. */
export function browserRim(): LinkRim {
  return {
    open: () => {
      const secure = location.protocol === 'https:' ? 'wss:' : 'ws:';
      return new WebSocket(`${secure}//${location.host}/live`) as unknown as Socket;
    },
    now: () => performance.now(),
    after: (milliseconds, call) => {
      const timer = setTimeout(call, milliseconds);
      return () => clearTimeout(timer);
    },
    chance: () => Math.random(),
  };
}
