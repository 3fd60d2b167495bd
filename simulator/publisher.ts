import mqtt, { type MqttClient } from 'mqtt';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition, Logger, Sensor } from '#core/contract/bridge.ts';
import { sampleMicros } from '#core/contract/time.ts';
import { wireSamples } from './logger.ts';
import { samplesPayload, senmlPayload, type WireSamples } from './payload.ts';

/** One logger's connection to the broker. */
export interface LoggerPublisher {
  /** Resolves once the block is on its way and fewer than the limit wait for their acknowledgement. */
  publish(block: SampleBlock): Promise<void>;
  /** Waits for what is on its way, says `offline` and disconnects. May be called twice. */
  stop(): Promise<void>;
}

export interface PublisherOptions {
  brokerUrl: string;
  /** First level of the topics. */
  root: string;
  definition: BridgeDefinition;
  logger: string;
  username?: string | undefined;
  password?: string | undefined;
  /** Told when the connection is lost or refused; it is tried again by itself. */
  onTrouble?: (reason: string) => void;
}

/** Messages that may wait for the broker's acknowledgement; at the limit `publish` waits. */
const LIMIT_IN_FLIGHT = 32;

/**
 * Connects like a real logger: QoS 1, a retained `status` of `online`, and a last will of `offline`. Vibration goes out
 * as `samples` (CBOR), temperature as SenML. A logger that the definition maps to a topic of its own, or whose channels
 * have other names there, publishes by that.
 *
 * @throws Error where the first connection fails; later the client connects again by itself
 */
export async function connectLogger(options: PublisherOptions): Promise<LoggerPublisher> {
  const { root, definition, logger: id } = options;
  const base = `${root}/${definition.id}/${id}`;
  const client = await mqtt.connectAsync(options.brokerUrl, {
    clientId: `${id}-${definition.id}-${process.pid.toString(36)}`,
    clean: true,
    reconnectPeriod: 1000,
    connectTimeout: 10_000,
    will: { topic: `${base}/status`, payload: Buffer.from('offline'), qos: 1, retain: true },
    ...(options.username === undefined ? {} : { username: options.username }),
    ...(options.password === undefined ? {} : { password: options.password }),
  });
  client.on('error', (error) => options.onTrouble?.(error.message));
  client.on('offline', () => options.onTrouble?.('the broker does not answer'));
  const online = (): void => void client.publish(`${base}/status`, 'online', { qos: 1, retain: true });
  client.on('connect', online);
  online();

  const voice = createVoice(definition, id, base);
  const line = createLine(client);
  let stopped: Promise<void> | null = null;
  return {
    async publish(block) {
      for (const { topic, payload } of voice(block)) await line.send(topic, payload);
    },
    stop() {
      stopped ??= (async () => {
        await line.drained();
        if (client.connected) await client.publishAsync(`${base}/status`, 'offline', { qos: 1, retain: true });
        await client.endAsync(!client.connected);
      })();
      return stopped;
    },
  };
}

interface Message {
  topic: string;
  payload: Buffer;
}

/** How this logger says a block. */
function createVoice(definition: BridgeDefinition, id: string, base: string): (block: SampleBlock) => Message[] {
  const sensors = new Map(definition.sensors.map((sensor) => [sensor.id, sensor]));
  const logger = definition.loggers.find((each) => each.id === id);
  const names = new Map(Object.entries(logger?.channels ?? {}).map(([name, sensor]) => [sensor, name]));
  const nameOf = (sensor: string): string => names.get(sensor) ?? sensor;
  return (block) => {
    const known = block.channels.flatMap(({ sensor, samples }) => {
      const found = sensors.get(sensor);
      return found === undefined ? [] : [{ sensor: found, samples }];
    });
    const asSenml = (sensor: Sensor): boolean => (logger?.payload ?? ownPayload(sensor)) === 'senml';
    const slow = known.filter(({ sensor }) => asSenml(sensor));
    const fast = known.filter(({ sensor }) => !asSenml(sensor));
    const messages: Message[] = [];
    if (fast.length > 0) {
      const channels = new Map<string, WireSamples>(
        fast.map(({ sensor, samples }) => [nameOf(sensor.id), wireSamples(sensor, samples)]),
      );
      const { startMicros, rateHz, sequence } = block;
      messages.push({
        topic: topicOf(logger, base, 'samples'),
        payload: samplesPayload({ startMicros, rateHz, sequence, channels }),
      });
    }
    const readings = slow.flatMap(({ sensor, samples }) =>
      Array.from(samples, (value, index) => ({
        name: nameOf(sensor.id),
        unit: sensor.unit,
        value: Math.fround(value),
        micros: sampleMicros(block.startMicros, index, block.rateHz),
      })),
    );
    if (readings.length > 0) messages.push({ topic: topicOf(logger, base, 'senml'), payload: senmlPayload(readings) });
    return messages;
  };
}

const ownPayload = (sensor: Sensor): 'samples' | 'senml' => (sensor.quantity === 'temperature' ? 'senml' : 'samples');

/** A topic with wildcards stands for many; the usual one is then as good. */
function topicOf(logger: Logger | undefined, base: string, kind: 'samples' | 'senml'): string {
  const { topic } = logger ?? {};
  return topic === undefined || /[+#]/.test(topic) ? `${base}/${kind}` : topic;
}

interface Line {
  send(topic: string, payload: Buffer): Promise<void>;
  /** Resolves when nothing waits, or at once where the broker is away. */
  drained(): Promise<void>;
}

function createLine(client: MqttClient): Line {
  let waiting = 0;
  let wake: (() => void)[] = [];
  const change = (): void => {
    const woken = wake;
    wake = [];
    for (const resolve of woken) resolve();
  };
  client.on('close', change);
  const until = async (done: () => boolean): Promise<void> => {
    while (!done()) await new Promise<void>((resolve) => wake.push(resolve));
  };
  return {
    async send(topic, payload) {
      await until(() => waiting < LIMIT_IN_FLIGHT || client.disconnecting);
      if (client.disconnecting) return;
      waiting++;
      client.publish(topic, payload, { qos: 1 }, () => {
        waiting--;
        change();
      });
    },
    drained: () => until(() => waiting === 0 || !client.connected),
  };
}
