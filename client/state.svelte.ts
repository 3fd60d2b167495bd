import type { Alarm } from '#core/contract/alarm.ts';
import type { Frame } from '#core/contract/frame.ts';
import type { SensorHealth } from '#core/contract/health.ts';
import type { ServerMessage } from '#core/contract/live.ts';
import type { Passage } from '#core/contract/passage.ts';
import { SEVERITIES, severityRank, type Severity } from '#core/contract/severity.ts';
import type { BridgeStatus, SystemStatus } from '#core/contract/status.ts';
import type { Micros } from '#core/contract/time.ts';
import { RequestFailed } from './api.ts';
import { browserRim, openLink, type Link, type LinkState, type Watch } from './link.ts';

type Progress = Extract<ServerMessage, { type: 'progress' }>;
type AxlesMessage = Extract<ServerMessage, { type: 'axles' }>;
type SpectrumMessage = Extract<ServerMessage, { type: 'spectrum' }>;

/** What comes too often to be reactive state; a place subscribes while it is shown. */
export interface Stream {
  frame?: (frame: Frame) => void;
  axles?: (message: AxlesMessage) => void;
  spectrum?: (message: SpectrumMessage) => void;
  progress?: (message: Progress) => void;
  /** The server runs anew or the line was broken: what was drawn may have holes. */
  broken?: () => void;
}

/** Passages of one bridge that are kept on the page. */
const PASSAGES_KEPT = 50;

/** All that the page knows from the server, one copy for all places. */
class Live {
  link = $state.raw<LinkState>({ kind: 'connecting', attempt: 0 });
  status = $state.raw<SystemStatus | null>(null);
  /** All alarms that are not back to normal and answered, newest first. */
  alarms = $state.raw<readonly Alarm[]>([]);
  /** Newest passages of each bridge, newest first, once each. */
  passages = $state.raw<Readonly<Record<string, readonly Passage[]>>>({});
  health = $state.raw<Readonly<Record<string, readonly SensorHealth[]>>>({});
  /** The server's clock at its last sign of life, and this page's clock then. */
  #server = { micros: 0, heardMs: 0 };
  /** Ticks once a second, for ages. The server's time, µs; this machine's before the first hello. */
  nowMicros = $state.raw<Micros>(Date.now() * 1000);
  /** When the server was seen to run anew, on the page's clock; null if it was not. */
  restartedMicros = $state.raw<Micros | null>(null);
  /** The last thing that an assistive technology should hear. */
  announcement = $state.raw('');
  /** Complaint of the server about what this page sent. */
  complaint = $state.raw<string | null>(null);

  bridges = $derived<readonly BridgeStatus[]>(this.status?.bridges ?? []);
  unanswered = $derived(countUnanswered(this.alarms));

  #streams = new Set<Stream>();
  #link: Link | null = null;

  /** Opens the line; the returned function closes it. */
  start(): () => void {
    const link = openLink(browserRim(), {
      message: (message) => this.take(message),
      frame: (frame) => this.#each('frame', frame),
      state: (state) => this.#linkChanged(state),
      restarted: () => {
        this.restartedMicros = this.serverMicros();
        this.#each('broken', undefined);
      },
      garbled: (why) => (this.complaint = `a message of the server was not understood: ${why}`),
    });
    this.#link = link;
    const clock = setInterval(() => (this.nowMicros = this.serverMicros()), 1000);
    return () => {
      clearInterval(clock);
      link.close();
    };
  }

  /** The server's time now, µs: its last word plus what has passed here since. */
  serverMicros(): Micros {
    if (this.#server.micros === 0) return Date.now() * 1000;
    return Math.round(this.#server.micros + (performance.now() - this.#server.heardMs) * 1000);
  }

  /** @returns ends the subscription */
  listen(stream: Stream): () => void {
    this.#streams.add(stream);
    return () => this.#streams.delete(stream);
  }

  watch(watch: Watch): void {
    this.#link?.watch(watch);
  }

  unwatch(): void {
    this.#link?.unwatch();
  }

  retry(): void {
    this.#link?.retry();
  }

  bridge(id: string | null): BridgeStatus | null {
    return this.bridges.find((bridge) => bridge.id === id) ?? null;
  }

  lastPassage(bridge: string): Passage | null {
    return this.passages[bridge]?.[0] ?? null;
  }

  take(message: ServerMessage): void {
    switch (message.type) {
      case 'hello':
        this.#heard(message.nowMicros, message.status);
        this.alarms = inOrder(message.alarms);
        break;
      case 'status':
        this.#heard(message.nowMicros, message.status);
        break;
      case 'alarm':
        this.takeAlarm(message.alarm);
        break;
      case 'passage':
        this.#takePassage(message.passage);
        break;
      case 'health':
        this.health = { ...this.health, [message.bridge]: message.sensors };
        break;
      case 'progress':
        this.#each('progress', message);
        break;
      case 'axles':
        this.#each('axles', message);
        break;
      case 'spectrum':
        this.#each('spectrum', message);
        break;
      case 'complaint':
        this.complaint = message.message;
    }
  }

  /** An alarm as it is now; one that is back to normal leaves the open ones. */
  takeAlarm(alarm: Alarm): void {
    const before = this.alarms.find(({ id }) => id === alarm.id);
    const others = this.alarms.filter(({ id }) => id !== alarm.id);
    this.alarms = alarm.state === 'normal' ? others : inOrder([alarm, ...others]);
    if (!before || severityRank(alarm.severity) > severityRank(before.severity)) {
      this.announcement = `${before ? 'Alarm escalated' : 'New alarm'}, ${alarm.severity}: ${alarm.message}`;
    }
  }

  #takePassage(passage: Passage): void {
    const others = (this.passages[passage.bridge] ?? []).filter(({ id }) => id !== passage.id);
    const kept = [passage, ...others].sort((a, b) => b.startMicros - a.startMicros).slice(0, PASSAGES_KEPT);
    this.passages = { ...this.passages, [passage.bridge]: kept };
  }

  #heard(nowMicros: Micros, status: SystemStatus): void {
    this.#server = { micros: nowMicros, heardMs: performance.now() };
    this.nowMicros = nowMicros;
    this.status = status;
  }

  #linkChanged(state: LinkState): void {
    const before = this.link.kind;
    this.link = state;
    if (state.kind === 'lost' && before !== 'lost') {
      this.announcement = 'Connection to the server lost; what is shown is no longer live.';
      this.#each('broken', undefined);
    }
    if (state.kind === 'live' && before === 'lost') this.announcement = 'Connected again.';
  }

  #each<K extends keyof Stream>(kind: K, value: Parameters<NonNullable<Stream[K]>>[0]): void {
    for (const stream of this.#streams) (stream[kind] as ((value: unknown) => void) | undefined)?.(value);
  }
}

export type AlarmCounts = Readonly<Record<Severity, number>>;

/** Alarms nobody has answered, by severity. */
export function countUnanswered(alarms: readonly Alarm[], bridge: string | null = null): AlarmCounts {
  const counts = { AL: 0, IL: 0, IAL: 0 };
  for (const alarm of alarms) {
    const open = alarm.state === 'unacknowledged' || alarm.state === 'returned to normal, unacknowledged';
    if (open && (bridge === null || alarm.bridge === bridge)) counts[alarm.severity] += 1;
  }
  return counts;
}

/** All of them, whatever their severity. */
export const totalOf = (counts: AlarmCounts): number => counts.AL + counts.IL + counts.IAL;

/** The gravest severity that is counted, or null. */
export function gravest(counts: AlarmCounts): Severity | null {
  return SEVERITIES.toReversed().find((severity) => counts[severity] > 0) ?? null;
}

const inOrder = (alarms: readonly Alarm[]): Alarm[] => alarms.toSorted((a, b) => b.raisedMicros - a.raisedMicros);

export const live = new Live();

/** A thing asked of the server: its value, or the complaint, or neither yet. The last value stays while it is asked again. */
export class Asked<T> {
  value = $state.raw<T | null>(null);
  complaint = $state.raw<RequestFailed | null>(null);
  waiting = $state.raw(false);
  #last: AbortController | null = null;

  /** Asks; an earlier question that is still open is called off. */
  async ask(question: (signal: AbortSignal) => Promise<T>): Promise<void> {
    this.#last?.abort();
    const mine = new AbortController();
    this.#last = mine;
    this.waiting = true;
    try {
      const value = await question(mine.signal);
      if (mine.signal.aborted) return;
      this.value = value;
      this.complaint = null;
    } catch (error) {
      if (mine.signal.aborted) return;
      this.complaint =
        error instanceof RequestFailed
          ? error
          : new RequestFailed({ code: 'UNREADABLE', message: 'the answer could not be read' }, 0);
    } finally {
      if (!mine.signal.aborted) this.waiting = false;
    }
  }

  clear(): void {
    this.#last?.abort();
    this.value = null;
    this.complaint = null;
    this.waiting = false;
  }
}
