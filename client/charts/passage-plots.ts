import { isDeckAcceleration, spanAt, type BridgeDefinition, type Limit, type Sensor } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import { severityOf } from '#core/contract/severity.ts';
import type { Decay } from './decay.ts';
import { limitLines } from './limit-line.ts';
import { forcedWords } from './passage-words.ts';
import type { PlotSpec } from './plot.ts';
import { plotColumns, valueAt, type Wave } from './wave.ts';

const UNITS: Readonly<Record<Sensor['quantity'], string>> = {
  acceleration: 'm/s²',
  strain: 'µm/m',
  displacement: 'mm',
  temperature: '°C',
  'axle detector': '1',
};

/** The limit that holds for a sensor's span, where it measures what the limits speak of. */
export function limitOf(definition: BridgeDefinition, sensor: Sensor): Limit | undefined {
  if (!isDeckAcceleration(sensor)) return undefined;
  const span = definition.spans.find(
    ({ startM, lengthM }) => sensor.alongM >= startM && sensor.alongM <= startM + lengthM,
  );
  return definition.limits.find(({ spans }) => !spans || (span !== undefined && spans.includes(span.id)));
}

/** One channel in time, with its limits, the phases shaded, and the part above the alert limit drawn over. */
export function waveformSpec(definition: BridgeDefinition, passage: Passage, sensor: Sensor, wave: Wave): PlotSpec {
  const zero = passage.phases.onMicros;
  const after = (micros: number): number => (micros - zero) / 1e6;
  const words = forcedWords(passage);
  const off = after(passage.phases.offMicros);
  const freeEnd = after(passage.phases.freeEndMicros);
  const from = Math.max(after(passage.startMicros), -1.5);
  const to = Math.min(after(passage.endMicros), Math.max(freeEnd + 2, off + 3));
  const { seconds, values } = plotColumns(wave, zero, zero + from * 1e6, zero + to * 1e6);
  const unit = UNITS[sensor.quantity];
  const limit = limitOf(definition, sensor);
  const lines = limitLines(limit?.levels);
  const greatest = values.reduce<number>((most, value) => Math.max(most, Math.abs(value ?? 0)), 0);
  const reach = Math.max(greatest, lines[0]?.value ?? 0, 1e-6) * 1.12;
  const least = values.reduce<number>((low, value) => Math.min(low, value ?? 0), 0);
  const lowest = lines.at(-1)?.value ?? Infinity;
  const digits = sensor.quantity === 'acceleration' ? 2 : 1;
  const measures = passage.channels.find((channel) => channel.sensor === sensor.id);
  const peakMicros = measures?.bandPeakMicros ?? null;
  const peak = measures?.bandPeak.value ?? null;
  const peakAt = peakMicros === null ? -1 : nearest(seconds, after(peakMicros));
  return {
    x: { values: seconds, title: `time after ${words.zero}, s`, digits: 3, from, to },
    y: {
      title: unit,
      digits,
      unit,
      from: lines.length > 0 || least < -0.2 * greatest ? -reach : least - 0.05 * reach,
      to: reach,
    },
    series: [
      { label: sensor.id, values, colour: 'ink', width: 0.95 },
      ...(peak !== null && peak > lowest
        ? [
            {
              label: `${sensor.id} above AL`,
              values: values.map((value) => (value !== null && Math.abs(value) > lowest ? value : null)),
              colour: 'signal' as const,
              width: 1.9,
              silent: true,
            },
          ]
        : []),
    ],
    limits: { lines, both: true },
    shades: [
      { from: 0, to: off, label: `${words.part}, 0.00 to ${off.toFixed(2)} s`, strength: 1 },
      { from: off, to: freeEnd, label: `free decay, ${off.toFixed(2)} to ${freeEnd.toFixed(2)} s`, strength: 0.45 },
    ],
    marks:
      limit && peak !== null && peakAt >= 0
        ? [
            {
              x: seconds[peakAt]!,
              y: values[peakAt] ?? 0,
              severity: severityOf(peak, limit.levels),
              label: peak.toFixed(2),
            },
          ]
        : [],
  };
}

/** The free decay on a logarithmic axis with its envelope, and the line of the stored f1 and ζ1. */
export function decaySpec(decay: Decay): PlotSpec {
  const strongest = Math.max(...decay.envelope.map((point) => point.amplitude), 1e-6);
  const from = Math.max(10 ** Math.floor(Math.log10(strongest / 100)), 1e-4);
  const end = decay.seconds.at(-1) ?? 1;
  const envelopeAt = new Map(
    decay.envelope.map(({ second, amplitude }) => [nearest(decay.seconds, second), amplitude]),
  );
  const { fit } = decay;
  return {
    x: { values: decay.seconds, title: 'time after the last axle, s', digits: 3, from: 0, to: end },
    y: { title: 'm/s²', digits: 2, unit: 'm/s²', from, to: strongest * 2.2, log: true },
    series: [
      {
        label: 'rectified',
        values: decay.rectified.map((value) => Math.max(value, from)),
        colour: 'ink3',
        width: 0.7,
      },
      ...(fit
        ? [
            {
              label: 'fit',
              values: decay.seconds.map((second) => {
                const value = fit.amplitude * Math.exp(-fit.perSecond * second);
                return value < from ? null : value;
              }),
              colour: 'select' as const,
              width: 1.35,
              dash: [6, 3],
            },
          ]
        : []),
      {
        label: 'envelope',
        values: decay.seconds.map((_, i) => {
          const value = envelopeAt.get(i);
          return value === undefined || value < from ? null : value;
        }),
        colour: 'ink',
        width: 0,
        circles: true,
        silent: true,
      },
    ],
  };
}

export interface SpectrumLines {
  stepHz: number;
  forced: Float64Array | null;
  free: Float64Array | null;
}

/** Amplitude spectral densities of the forced part and of the free decay. */
export function spectrumSpec(
  lines: SpectrumLines,
  f1Hz: number | null,
  known: { at: number; label: string }[],
  upToHz: number,
): PlotSpec {
  const length = Math.max(lines.forced?.length ?? 0, lines.free?.length ?? 0);
  const hertz = Array.from({ length }, (_, i) => i * lines.stepHz);
  const amplitude = (psd: Float64Array | null): (number | null)[] =>
    hertz.map((_, i) => (psd?.[i] === undefined || i === 0 ? null : Math.sqrt(Math.max(0, psd[i]))));
  const forced = amplitude(lines.forced);
  const free = amplitude(lines.free);
  const within = [...forced, ...free].filter((value, i): value is number => {
    return value !== null && value > 0 && hertz[i % length]! <= upToHz;
  });
  const top = within.reduce((most, value) => Math.max(most, value), 1e-3);
  const to = 10 ** (Math.ceil(Math.log10(top) * 2) / 2);
  const from = Math.max(
    10 ** Math.floor(Math.log10(within.reduce((least, value) => Math.min(least, value), top))),
    to / 1e5,
  );
  const floor = (values: (number | null)[]): (number | null)[] =>
    values.map((value) => (value === null ? null : Math.max(value, from)));
  return {
    x: { values: hertz, title: 'frequency, Hz', digits: 2, from: 0, to: upToHz },
    y: { title: '(m/s²)/√Hz', digits: 3, unit: '(m/s²)/√Hz', from, to, log: true },
    series: [
      ...(lines.forced
        ? [{ label: 'forced', values: floor(forced), colour: 'ink3' as const, width: 0.95, tag: 'forced' }]
        : []),
      ...(lines.free
        ? [{ label: 'free decay', values: floor(free), colour: 'ink' as const, width: 1.9, tag: 'free decay' }]
        : []),
    ],
    uprights: [...(f1Hz === null ? [] : [{ at: f1Hz, label: `f1 ${f1Hz.toFixed(2)}` }]), ...known],
  };
}

/** Frequencies that the definition gives for a sensor's span, for the lines of a spectrum; each value once. */
export function knownFrequencies(
  definition: BridgeDefinition,
  sensorId: string,
  upToHz: number,
): { at: number; label: string }[] {
  const sensor = definition.sensors.find(({ id }) => id === sensorId);
  const frequencies = sensor ? spanAt(definition, sensor.alongM).frequenciesHz : undefined;
  const names = [
    ['torsion', frequencies?.torsion],
    ['f2', frequencies?.f2],
    ['f3', frequencies?.f3],
  ] as const;
  return names.flatMap(([label, at], i) => {
    if (at === undefined || at > upToHz || names.slice(0, i).some(([, earlier]) => earlier === at)) return [];
    return [{ at, label: `${at.toFixed(1)} ${label}` }];
  });
}

/** Two passages of one channel, aligned at the first axle, on one scale: this one above, the other below. */
export function comparisonSpec(
  definition: BridgeDefinition,
  sensor: Sensor,
  here: { passage: Passage; wave: Wave; tag: string },
  other: { passage: Passage; wave: Wave; tag: string },
): PlotSpec {
  const length = ({ phases }: Passage): number => (phases.freeEndMicros - phases.onMicros) / 1e6;
  const from = -0.5;
  const to = Math.max(length(here.passage), length(other.passage)) + 0.5;
  const zero = here.passage.phases.onMicros;
  const otherZero = other.passage.phases.onMicros;
  // One time axis for both: samples that this passage's record does not reach are still asked of the other.
  const count = Math.floor((to - from) * here.wave.rateHz);
  const seconds = Array.from({ length: count }, (_, i) => from + i / here.wave.rateHz);
  const values = seconds.map((second) => valueAt(here.wave, zero + second * 1e6));
  const otherValues = seconds.map((second) => valueAt(other.wave, otherZero + second * 1e6));
  const greatest = [...values, ...otherValues].reduce<number>(
    (most, value) => Math.max(most, Math.abs(value ?? 0)),
    1e-6,
  );
  const lines = limitLines(limitOf(definition, sensor)?.levels).filter(({ value }) => value < greatest * 1.1);
  const reach = Math.max(greatest, ...lines.map(({ value }) => value)) * 1.12;
  const unit = UNITS[sensor.quantity];
  return {
    x: { values: seconds, title: 'time after the first axle, s', digits: 3, from, to },
    y: { title: `${sensor.id}, ${unit}`, digits: 2, unit, from: -reach, to: reach, lanes: 2 },
    series: [
      { label: here.tag, values, colour: 'ink', width: 0.95, tag: here.tag },
      { label: other.tag, values: otherValues, colour: 'select', width: 0.95, tag: other.tag, lane: 1 },
    ],
    limits: { lines, both: true },
  };
}

/** Index of the value nearest to one, in rising values. */
export function nearest(rising: readonly number[], value: number): number {
  let low = 0;
  let high = rising.length - 1;
  while (high - low > 1) {
    const middle = (low + high) >> 1;
    if (rising[middle]! < value) low = middle;
    else high = middle;
  }
  return Math.abs((rising[low] ?? Infinity) - value) <= Math.abs((rising[high] ?? Infinity) - value) ? low : high;
}
