import { setTimeout as sleep } from 'node:timers/promises';
import type { Alarm } from '#core/contract/alarm.ts';
import type { Passage } from '#core/contract/passage.ts';

/**
 * Results on MQTT, for whoever listens:
 *
 *   <root>/<bridge>/passages   one message a passage: JSON of `Passage` (core/contract/passage.ts)
 *   <root>/<bridge>/alarms     one message each time an alarm changes: JSON of `Alarm` (core/contract/alarm.ts), whole;
 *                              a listener keeps the newest of each `id`
 *
 * Both UTF-8, QoS 1, not retained. A message may come twice; `id` tells.
 */
export interface Message {
  topic: string;
  payload: string;
  qos: 1;
}

export function passageMessage(root: string, passage: Passage): Message {
  return { topic: `${root}/${passage.bridge}/passages`, payload: JSON.stringify(passage), qos: 1 };
}

export function alarmMessage(root: string, alarm: Alarm): Message {
  return { topic: `${root}/${alarm.bridge}/alarms`, payload: JSON.stringify(alarm), qos: 1 };
}

export interface PublisherOptions {
  root: string;
  /** Resolves when the broker has taken the message; rejects, or stays open, while it is away. */
  publish: (message: Message) => Promise<void>;
  /** Told once for each alarm message that was taken, so that it becomes a step of the alarm. */
  published: (alarm: Alarm) => void;
  /** Passages held while the broker is away; beyond, the oldest is dropped and counted. */
  maxPassages?: number;
  /** For tests; real time where absent. */
  pause?: (ms: number, signal: AbortSignal) => Promise<void>;
}

export interface Publisher {
  passage(passage: Passage): void;
  alarm(alarm: Alarm): void;
  counts(): PublisherCounts;
  /** Stops sending. What is held is left: passages and alarms are in the history. Idempotent. */
  close(): Promise<void>;
}

interface PublisherCounts {
  sentPassages: number;
  sentAlarms: number;
  heldPassages: number;
  heldAlarms: number;
  droppedPassages: number;
  /** Older states of an alarm that a newer one took the place of before they could be sent. */
  supersededAlarms: number;
  failures: number;
}

const MAX_PASSAGES = 1000;
const FIRST_PAUSE_MS = 250;
const LONGEST_PAUSE_MS = 30_000;

/**
 * Sends one message at a time, alarms before passages, and again with growing pauses until the broker takes it.
 *
 * While it is away, the newest state of each alarm is held and never dropped (older states of the same alarm are), and the
 * newest passages up to the limit.
 */
export function createPublisher(options: PublisherOptions): Publisher {
  const { root, publish, published, maxPassages = MAX_PASSAGES, pause = wait } = options;
  const alarms = new Map<string, Alarm>();
  const passages: Passage[] = [];
  const counts = { sentPassages: 0, sentAlarms: 0, droppedPassages: 0, supersededAlarms: 0, failures: 0 };
  const closing = new AbortController();
  let draining: Promise<void> | null = null;

  async function sendFirst(): Promise<void> {
    const alarm = alarms.values().next().value;
    if (alarm !== undefined) {
      await publish(alarmMessage(root, alarm));
      counts.sentAlarms += 1;
      // A newer state may have come in while this one was on its way: that one is still to go.
      if (alarms.get(alarm.id) === alarm) alarms.delete(alarm.id);
      published(alarm);
      return;
    }
    const passage = passages[0];
    if (passage === undefined) return;
    await publish(passageMessage(root, passage));
    counts.sentPassages += 1;
    if (passages[0] === passage) passages.shift();
  }

  async function drain(): Promise<void> {
    let pauseMs = FIRST_PAUSE_MS;
    while (alarms.size + passages.length > 0 && !closing.signal.aborted) {
      // Whatever the reason of a failure, the message is still held; the broker's connection tells the reason itself.
      const outcome = await orClosed(sendFirst(), closing.signal);
      if (outcome === 'failed') {
        counts.failures += 1;
        await pause(pauseMs, closing.signal);
      }
      pauseMs = outcome === 'failed' ? Math.min(2 * pauseMs, LONGEST_PAUSE_MS) : FIRST_PAUSE_MS;
    }
  }

  function wake(): void {
    if (closing.signal.aborted) return;
    draining ??= drain().finally(() => {
      draining = null;
      if (alarms.size + passages.length > 0) wake();
    });
  }

  return {
    passage(passage) {
      passages.push(passage);
      if (passages.length > maxPassages) {
        passages.shift();
        counts.droppedPassages += 1;
      }
      wake();
    },
    alarm(alarm) {
      if (alarms.has(alarm.id)) counts.supersededAlarms += 1;
      alarms.set(alarm.id, alarm);
      wake();
    },
    counts: () => ({ ...counts, heldPassages: passages.length, heldAlarms: alarms.size }),
    async close() {
      closing.abort();
      await draining;
    },
  };
}

/** How a task ended, or that the signal came first. */
function orClosed(task: Promise<void>, signal: AbortSignal): Promise<'sent' | 'failed' | 'closed'> {
  return new Promise((resolve) => {
    const stop = (): void => resolve('closed');
    signal.addEventListener('abort', stop, { once: true });
    task
      .then(
        () => resolve('sent'),
        () => resolve('failed'),
      )
      .finally(() => signal.removeEventListener('abort', stop));
  });
}

async function wait(ms: number, signal: AbortSignal): Promise<void> {
  await sleep(ms, undefined, { signal }).catch(() => undefined); // cut short by close: that is what the signal is for
}
