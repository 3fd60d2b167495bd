import { describe, expect, test } from 'vitest';
import { Value } from 'typebox/value';
import { Alarm } from '#core/contract/alarm.ts';
import { Passage } from '#core/contract/passage.ts';
import { alarmMessage, createPublisher, passageMessage, type Message } from '../../server/notify/mqtt.ts';
import { aPassage, anAlarm, DAWN } from '../support/specimen.ts';

const turn = (): Promise<void> => new Promise((resolve) => setImmediate(resolve));
async function turns(count: number): Promise<void> {
  for (let i = 0; i < count; i++) await turn();
}

/** A broker that can be away. */
function aBroker(): { publish: (message: Message) => Promise<void>; taken: Message[]; away: boolean } {
  const broker = {
    taken: [] as Message[],
    away: false,
    publish: (message: Message): Promise<void> => {
      if (broker.away) return Promise.reject(new Error('away'));
      broker.taken.push(message);
      return Promise.resolve();
    },
  };
  return broker;
}
const ids = (messages: Message[]): string[] =>
  messages.map(({ payload }) => (JSON.parse(payload) as { id: string }).id);
const idle = { pause: turn, published: () => undefined, root: 'rail' };
const later = (i: number): Passage => aPassage({ onMicros: DAWN + i * 60_000_000 });

describe('a message', () => {
  test('is the JSON of the contract, on the topic of its bridge, with QoS 1', () => {
    const passage = passageMessage('rail/north', aPassage());
    expect(passage).toMatchObject({ topic: 'rail/north/ottermere/passages', qos: 1 });
    expect(Value.Check(Passage, JSON.parse(passage.payload))).toBe(true);
    expect(JSON.parse(passage.payload)).toEqual(aPassage());
    const alarm = alarmMessage('rail', anAlarm());
    expect(alarm.topic).toBe('rail/ottermere/alarms');
    expect(Value.Check(Alarm, JSON.parse(alarm.payload))).toBe(true);
  });
});

describe('the publisher', () => {
  test('sends what it is given, tells of each alarm that went out, and then holds nothing', async () => {
    const broker = aBroker();
    const told: string[] = [];
    const publisher = createPublisher({ ...idle, publish: broker.publish, published: ({ id }) => void told.push(id) });
    publisher.passage(later(0));
    publisher.alarm(anAlarm());
    await turns(5);
    expect(ids(broker.taken).toSorted()).toEqual([anAlarm().id, later(0).id].toSorted());
    expect(told).toEqual([anAlarm().id]);
    expect(publisher.counts()).toEqual({
      sentPassages: 1,
      sentAlarms: 1,
      heldPassages: 0,
      heldAlarms: 0,
      droppedPassages: 0,
      supersededAlarms: 0,
      failures: 0,
    });
    await publisher.close();
  });

  test('while the broker is away drops the oldest passages, counts them, and keeps the newest state of every alarm', async () => {
    const broker = aBroker();
    broker.away = true;
    const publisher = createPublisher({ ...idle, publish: broker.publish, maxPassages: 3 });
    for (let i = 0; i < 5; i++) publisher.passage(later(i));
    for (let i = 0; i < 50; i++) publisher.alarm(anAlarm(DAWN + i * 1_000_000));
    publisher.alarm(anAlarm(DAWN, 'IL'));
    publisher.alarm(anAlarm(DAWN, 'IAL'));
    await turns(10);
    expect(publisher.counts()).toMatchObject({
      heldPassages: 3,
      droppedPassages: 2,
      heldAlarms: 50,
      supersededAlarms: 2,
      sentAlarms: 0,
    });
    expect(publisher.counts().failures).toBeGreaterThan(1);
    broker.away = false;
    await turns(200);
    const alarms = broker.taken.filter(({ topic }) => topic.endsWith('alarms'));
    expect(new Set(ids(alarms)).size).toBe(50);
    expect(alarms).toHaveLength(50);
    expect((JSON.parse(alarms[0]?.payload ?? '{}') as Alarm).severity).toBe('IAL');
    expect(broker.taken.slice(0, 50).every(({ topic }) => topic.endsWith('alarms'))).toBe(true);
    expect(ids(broker.taken.slice(50))).toEqual([later(2).id, later(3).id, later(4).id]);
    await publisher.close();
  });

  test('sends a state that came in while an older one of the same alarm was on its way', async () => {
    const taken: Message[] = [];
    let take = (): void => undefined;
    const publisher = createPublisher({
      ...idle,
      publish: (message) => new Promise((resolve) => (take = () => resolve(void taken.push(message)))),
    });
    publisher.alarm(anAlarm(DAWN, 'AL'));
    await turn();
    publisher.alarm(anAlarm(DAWN, 'IL'));
    take();
    await turns(3);
    take();
    await turns(3);
    expect(taken.map(({ payload }) => (JSON.parse(payload) as Alarm).severity)).toEqual(['AL', 'IL']);
    expect(publisher.counts().heldAlarms).toBe(0);
    await publisher.close();
  });

  test('pauses longer after each failure, up to 30 s, and starts small again after a success', async () => {
    const broker = aBroker();
    broker.away = true;
    const pauses: number[] = [];
    const pause = async (ms: number): Promise<void> => {
      pauses.push(ms);
      if (pauses.length === 9) broker.away = false;
      await turn();
    };
    const publisher = createPublisher({ ...idle, publish: broker.publish, pause });
    publisher.alarm(anAlarm());
    await turns(30);
    expect(pauses).toEqual([250, 500, 1000, 2000, 4000, 8000, 16_000, 30_000, 30_000]);
    broker.away = true;
    publisher.alarm(anAlarm());
    await turns(2);
    expect(pauses[9]).toBe(250);
    await publisher.close();
  });

  test('stops at once when it is closed, also in a pause or with a message on its way, and takes nothing more', async () => {
    let sent = 0;
    const publisher = createPublisher({
      root: 'rail',
      published: () => undefined,
      publish: () => ((sent += 1), new Promise(() => undefined)),
    });
    publisher.passage(later(0));
    await turn();
    await publisher.close();
    await publisher.close();
    publisher.passage(later(1));
    await turns(3);
    expect(sent).toBe(1);
    const paused = createPublisher({
      root: 'rail',
      published: () => undefined,
      publish: () => Promise.reject(new Error('away')),
    });
    paused.passage(later(0));
    await turns(3);
    await paused.close();
    expect(paused.counts().heldPassages).toBe(1);
  });
});
