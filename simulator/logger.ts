import { BLOCK_LIMITS, type ChannelSamples, type SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';
import type { WireSamples } from './payload.ts';
import type { SimulatedChannel } from './simulation.ts';

/** The loggers of a bridge: they gather what the sensors give into blocks and number them. */
export interface BridgeLoggers {
  /**
   * @param channels what the simulation gave for one stretch of time
   * @returns one block for each logger and rate, in order of time; values are those that survive the wire
   */
  gather(channels: readonly SimulatedChannel[]): SampleBlock[];
}

export function createLoggers(definition: BridgeDefinition): BridgeLoggers {
  const sensors = new Map(definition.sensors.map((sensor) => [sensor.id, sensor]));
  const sequences = new Map<string, number>();
  return {
    gather(channels) {
      const groups = new Map<string, { sensor: Sensor; channel: SimulatedChannel }[]>();
      for (const channel of channels) {
        const sensor = sensors.get(channel.sensor);
        if (sensor === undefined || channel.samples.length === 0) continue;
        const key = `${sensor.logger}\n${channel.rateHz}\n${channel.startMicros}\n${channel.samples.length}`;
        groups.set(key, [...(groups.get(key) ?? []), { sensor, channel }]);
      }
      const blocks = [...groups.values()].flatMap((members) => blocksOf(definition.id, members));
      blocks.sort((a, b) => a.startMicros - b.startMicros);
      return blocks.map((block) => {
        const sequence = sequences.get(block.logger) ?? 0;
        sequences.set(block.logger, sequence + 1);
        return { ...block, sequence };
      });
    },
  };
}

/** Sensors of one logger, rate and stretch of time; cut where the stretch is longer than a block may be. */
function blocksOf(bridge: string, members: readonly { sensor: Sensor; channel: SimulatedChannel }[]): SampleBlock[] {
  const { sensor, channel } = members[0]!;
  const blocks: SampleBlock[] = [];
  const most = BLOCK_LIMITS.samplesPerChannel;
  for (let at = 0; at < channel.samples.length; at += most) {
    const channels = members.map((member): ChannelSamples => ({
      sensor: member.sensor.id,
      samples: Float64Array.from(wireSamples(member.sensor, member.channel.samples.subarray(at, at + most))),
    }));
    const startMicros = channel.startMicros + Math.round((at * 1_000_000) / channel.rateHz);
    blocks.push({ bridge, logger: sensor.logger, sequence: null, startMicros, rateHz: channel.rateHz, channels });
  }
  return blocks;
}

/**
 * Samples in the numbers a logger sends: whole counts of 16 bits for a sensor with a scale (32 bits where they do not
 * suffice), else binary32.
 */
export function wireSamples(sensor: Pick<Sensor, 'scale'>, samples: Float64Array): WireSamples {
  if (sensor.scale === undefined) return Float32Array.from(samples);
  const fits = samples.every((value) => Math.abs(value) <= 32_767);
  // `from` of a typed array cuts decimals, so they are rounded first.
  const whole = samples.map(Math.round);
  return fits ? Int16Array.from(whole) : Int32Array.from(whole);
}
