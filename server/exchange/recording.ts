import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { Micros } from '#core/contract/time.ts';
import { unitConversion } from '#core/contract/units.ts';

/** A recording whose head has been read and whose samples flow when they are asked for. */
export interface Recording {
  file: string;
  /**
   * Units of the sensors whose samples are physical values: neither scale nor offset of the definition holds for them.
   * Sensors that are absent are as their logger sent them.
   */
  units: ReadonlyMap<string, string>;
  sensors: readonly string[];
  /** What a person should know: columns passed over, a torn last line. Grows while the samples flow. */
  notes: string[];
  blocks: AsyncIterable<SampleBlock>;
  /** The passage whose wave form this is, where the file says so: the archive's files do. */
  passage: Passage | null;
}

export interface RecordingOptions {
  /** Epoch of a recording that counts its time from zero. */
  startMicros: Micros | null;
}

/**
 * Several recordings as one, blocks in order of time: files of different rates side by side, or of different hours.
 *
 * @returns the blocks, and the definition under which they are to be read: sensors whose samples are physical values
 *   have that unit, and no scale or offset
 * @throws SpanbeatError where two recordings give a sensor in different units
 */
export function joinRecordings(
  recordings: readonly Recording[],
  definition: BridgeDefinition,
): { definition: BridgeDefinition; blocks: AsyncGenerator<SampleBlock> } {
  const units = new Map<string, string | null>();
  for (const recording of recordings) {
    for (const sensor of recording.sensors) {
      const unit = recording.units.get(sensor) ?? null;
      const before = units.get(sensor);
      if (before !== undefined && before !== unit) {
        const [one, other] = [before, unit].map((each) => (each === null ? 'as its logger sends it' : `in ${each}`));
        const detail = `sensor "${sensor}" is here ${other ?? ''}, in another recording ${one ?? ''}`;
        throw new SpanbeatError({ code: 'RECORDING_FORMAT', where: recording.file, detail });
      }
      units.set(sensor, unit);
    }
  }
  return {
    definition: {
      ...definition,
      sensors: definition.sensors.map((sensor) => readIn(sensor, units.get(sensor.id) ?? null)),
    },
    blocks: byTime(recordings.map(({ blocks }) => blocks)),
  };
}

/** The sensor as if it sent physical values in a unit. */
function readIn(sensor: Sensor, unit: string | null): Sensor {
  if (unit === null) return sensor;
  const from = unitConversion(sensor.unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const to = unitConversion(unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const read = { ...sensor, unit };
  delete read.scale;
  delete read.offset;
  if (sensor.range !== undefined && unit !== sensor.unit) {
    read.range = sensor.range.map((end) => (end * from.factor + from.shift - to.shift) / to.factor);
  }
  return read;
}

/** Always the earliest of the next blocks; one block of each recording is in hand at a time. */
async function* byTime(sources: readonly AsyncIterable<SampleBlock>[]): AsyncGenerator<SampleBlock> {
  const streams = sources.map((source) => source[Symbol.asyncIterator]());
  const heads = await Promise.all(streams.map((stream) => stream.next()));
  try {
    for (;;) {
      let earliest = -1;
      heads.forEach((head, index) => {
        const best = heads[earliest];
        if (
          head.done !== true &&
          (best === undefined || best.done === true || head.value.startMicros < best.value.startMicros)
        ) {
          earliest = index;
        }
      });
      const head = heads[earliest];
      if (head === undefined || head.done === true) return;
      yield head.value;
      heads[earliest] = await streams[earliest]!.next();
    }
  } finally {
    for (const stream of streams) await stream.return?.();
  }
}
