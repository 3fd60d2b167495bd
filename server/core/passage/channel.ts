import { countsAxles, isDeckAcceleration, spanAt, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import type { SensorCondition } from '../contract/health.ts';
import type { LevelEvent, LiveSamples, SpectrumLine } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, sampleMicros, type Micros } from '../contract/time.ts';
import { unitConversion } from '../contract/units.ts';
import { highpass, lowpass } from '../signal/butterworth.ts';
import { createCascade, filterInto, settleAt, type Cascade } from '../signal/cascade.ts';
import { HOLE_MOST } from '../signal/hole.ts';
import { bandOfLimit, canFilter } from './band.ts';
import { closeIntake, createIntake, takeIn, type Intake, type IntakeSink } from './intake.ts';
import { createLevelWatch, resumeLevel, watchLevel, type LevelWatch } from './level.ts';
import { createMemory, remember, type Memory } from './memory.ts';
import { createPulseFinder, findPulses, type PulseFinder } from './pulse.ts';
import { createRollingSpectrum, rollSpectrum, type RollingSpectrum } from './rolling-spectrum.ts';
import { DYNAMIC_HZ, RULE, TICK_MICROS } from './rule.ts';
import { createVitals, watchVitals, type Vitals } from './vitals.ts';

/** Everything the pipeline keeps of one sensor. Plain data: it can be cloned, stored and carried on elsewhere. */
export interface Channel {
  sensor: Sensor;
  deck: boolean;
  axles: boolean;
  /** Slow channels (temperature) are not waited for. */
  slow: boolean;
  /** Calibrated = (raw × gain) + shift, in SI, rounded to float32: the number that is stored and computed with. */
  gain: number;
  shift: number;
  intake: Intake;
  memory: Memory;
  vitals: Vitals;
  /** Running offset and how many samples it has seen. */
  offset: number;
  offsetSeen: number;
  /** Time of sample 0 of the present run, and how many samples of it are behind us. */
  runStart: Micros;
  runCount: number;
  newest: Micros | null;
  /** The last sample, less the offset. */
  lastCentred: number;
  bands: LiveBand[];
  noise: Cascade | null;
  pulses: PulseFinder | null;
  spectrum: RollingSpectrum | null;
  /** Features of finished ticks that the bridge has not taken yet, oldest first. */
  ticks: Tick[];
  /** The tick in hand. */
  tick: Tick | null;
  /** Number of the newest finished tick; -1 before the first. */
  through: number;
  /** False while the channel lags so far that the others no longer wait. */
  waitedFor: boolean;
}

/** One live filter, and the limits that ask for its band. */
interface LiveBand {
  upToHz: number;
  cascade: Cascade | null;
  watches: LevelWatch[];
  /** Samples until the filter has forgotten a gap; levels are not watched meanwhile. */
  settling: number;
  /** Samples watched since then. */
  watched: number;
}

/** What one channel did in one tenth of a second. */
export interface Tick {
  number: number;
  samples: number;
  /** Sum of squares above the noise edge, (m/s²)². */
  noisePower: number;
  /** Axle pulses, as times. */
  pulses: Micros[];
}

/** Where a channel's findings go. */
export interface ChannelSink {
  level: (event: LevelEvent) => void;
  live: (samples: LiveSamples) => void;
  spectrum: (line: SpectrumLine) => void;
  condition: (condition: SensorCondition) => void;
  pulse: (channel: Channel, micros: Micros, height: number) => void;
}

export function createChannel(bridge: BridgeDefinition, sensor: Sensor): Channel {
  const conversion = unitConversion(sensor.unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const deck = isDeckAcceleration(sensor);
  const span = spanAt(bridge, sensor.alongM);
  const limits = deck ? bridge.limits.filter((limit) => limit.spans?.includes(span.id) ?? true) : [];
  const noiseHz = Math.min(
    Math.max(RULE.noiseFromHz, RULE.noiseOverF1 * (span.frequenciesHz?.f1 ?? 0)),
    0.3 * sensor.rateHz,
  );
  return {
    sensor,
    deck,
    axles: countsAxles(sensor),
    slow: sensor.rateHz < DYNAMIC_HZ,
    gain: (sensor.scale ?? 1) * conversion.factor,
    shift: (sensor.offset ?? 0) * conversion.factor + conversion.shift,
    intake: createIntake(sensor.rateHz),
    memory: createMemory(sensor.rateHz),
    vitals: createVitals(sensor),
    offset: 0,
    offsetSeen: 0,
    runStart: 0,
    runCount: 0,
    newest: null,
    lastCentred: 0,
    bands: bandsOf(bridge, sensor, limits),
    noise: deck ? createCascade(highpass(RULE.noiseOrder, noiseHz, sensor.rateHz)) : null,
    pulses: countsAxles(sensor) ? createPulseFinder() : null,
    spectrum: deck ? createRollingSpectrum(sensor.rateHz) : null,
    ticks: [],
    tick: null,
    through: -1,
    waitedFor: sensor.rateHz >= DYNAMIC_HZ,
  };
}

/** One live filter per band edge, shared by the limits that ask for it. Without a limit: the code's band, for the screen. */
function bandsOf(bridge: BridgeDefinition, sensor: Sensor, limits: BridgeDefinition['limits']): LiveBand[] {
  if (!isDeckAcceleration(sensor)) return [];
  const byEdge = new Map<number, LevelWatch[]>();
  for (const limit of limits) {
    const { upToHz } = bandOfLimit(bridge, limit.band, sensor);
    byEdge.set(upToHz, [...(byEdge.get(upToHz) ?? []), createLevelWatch(limit)]);
  }
  if (byEdge.size === 0) byEdge.set(bandOfLimit(bridge, 'EN 1990 A2', sensor).upToHz, []);
  return [...byEdge].map(([upToHz, watches]) => ({
    upToHz,
    settling: 0,
    watched: 0,
    cascade: canFilter(upToHz, sensor.rateHz) ? createCascade(lowpass(RULE.bandOrder, upToHz, sensor.rateHz)) : null,
    watches,
  }));
}

/** Takes raw samples of one block. */
export function feedChannel(
  channel: Channel,
  bridge: string,
  startMicros: Micros,
  raw: Float64Array,
  sink: ChannelSink,
): void {
  const samples = new Float32Array(raw.length);
  for (let i = 0; i < raw.length; i++) samples[i] = raw[i]! * channel.gain + channel.shift;
  const own = sinkOf(channel, bridge, sink);
  takeIn(channel.intake, { startMicros, samples }, own);
}

/** At the end of a recording: takes what is held back and finishes the tick in hand. */
export function closeChannel(channel: Channel, bridge: string, sink: ChannelSink): void {
  closeIntake(channel.intake, sinkOf(channel, bridge, sink));
  finishTick(channel);
}

function sinkOf(channel: Channel, bridge: string, sink: ChannelSink): IntakeSink {
  return {
    take: (samples, from, to, startMicros, afterGap) =>
      process(channel, bridge, samples, from, to, startMicros, afterGap, sink),
    note: (code, state, micros, detail) =>
      sink.condition({ bridge, sensor: channel.sensor.id, code, state, micros, detail }),
  };
}

/** Work space of `process`, grown as needed; never carries anything from one call to the next. */
let centred = new Float64Array(0);
let filtered = new Float64Array(0);

function process(
  channel: Channel,
  bridge: string,
  samples: Float32Array,
  from: number,
  to: number,
  startMicros: Micros | null,
  afterGap: boolean,
  sink: ChannelSink,
): void {
  if (startMicros !== null) {
    if (afterGap && channel.newest !== null && startMicros < channel.newest) dropTicks(channel);
    channel.runStart = startMicros;
    channel.runCount = 0;
  }
  remember(channel.memory, samples, from, to, startMicros);
  const base = channel.runCount - from;
  const microsAt = (index: number): Micros => sampleMicros(channel.runStart, base + index, channel.sensor.rateHz);
  if (centred.length < to) {
    centred = new Float64Array(to * 2);
    filtered = new Float64Array(to * 2);
  }
  watchVitals(channel.vitals, bridge, samples, from, to, microsAt, sink.condition);
  if (channel.deck) {
    removeOffset(channel, samples, from, to);
    if (afterGap) passGap(channel, centred[from]!, microsAt(from));
    channel.lastCentred = centred[to - 1]!;
    const unsettled = Math.ceil(RULE.settleSeconds * channel.sensor.rateHz - (channel.offsetSeen - (to - from)));
    channel.bands.forEach((band, b) => {
      if (band.cascade === null) filtered.set(centred.subarray(from, to), from);
      else filterInto(band.cascade, centred, filtered, from, to);
      const firstWatched = Math.min(to, from + Math.max(0, unsettled, band.settling));
      band.settling = Math.max(0, band.settling - (to - from));
      band.watched += to - firstWatched;
      for (const watch of band.watches) {
        watchLevel(watch, filtered, firstWatched, to, microsAt, (event) =>
          sink.level({ bridge, sensor: channel.sensor.id, ...event }),
        );
      }
      if (b === 0) sink.live(liveOf(channel, bridge, Float32Array.from(filtered.subarray(from, to)), microsAt(from)));
    });
    if (channel.spectrum !== null) {
      rollSpectrum(channel.spectrum, centred, from, to, microsAt, afterGap, (line) =>
        sink.spectrum({ bridge, sensor: channel.sensor.id, ...line }),
      );
    }
    filterInto(channel.noise!, centred, filtered, from, to);
  } else {
    sink.live(liveOf(channel, bridge, samples.slice(from, to), microsAt(from)));
  }
  gatherTicks(channel, samples, from, to, microsAt, sink);
  channel.runCount = base + to;
  channel.newest = microsAt(to - 1);
}

function liveOf(channel: Channel, bridge: string, samples: Float32Array, startMicros: Micros): LiveSamples {
  return { bridge, sensor: channel.sensor.id, startMicros, rateHz: channel.sensor.rateHz, samples };
}

/**
 * Running mean with a memory of `RULE.offsetSeconds`, a plain mean until then. It lives on over gaps: after one in the
 * middle of a passage the first sample is no offset.
 */
function removeOffset(channel: Channel, samples: Float32Array, from: number, to: number): void {
  const least = 1 / (RULE.offsetSeconds * channel.sensor.rateHz);
  let { offset, offsetSeen } = channel;
  for (let i = from; i < to; i++) {
    const x = samples[i]!;
    offsetSeen += 1;
    offset += Math.max(1 / offsetSeen, least) * (x - offset);
    centred[i] = x - offset;
  }
  channel.offset = offset;
  channel.offsetSeen = offsetSeen;
}

/** A Butterworth low-pass of order 4 has forgotten all but 0.1 % of a step after this many periods of its edge. */
const SETTLING_PERIODS = 3;

/**
 * The filters go over a hole of a sample or two on a straight line; after a longer gap they begin anew. Either way they
 * hold for a while what the bridge did not do, and levels are not watched meanwhile: but where single samples are missing
 * all the time, they are watched for at least half of it.
 */
function passGap(channel: Channel, next: number, nextMicros: Micros): void {
  const { newest, lastCentred } = channel;
  const { rateHz } = channel.sensor;
  const missing = newest === null ? Infinity : Math.round(((nextMicros - newest) * rateHz) / MICROS_PER_SECOND) - 1;
  const short = missing >= 0 && missing <= HOLE_MOST;
  for (const filter of [...channel.bands.map(({ cascade }) => cascade), channel.noise]) {
    if (filter === null) continue;
    if (!short) settleAt(filter, next);
    for (let i = 1; short && i <= missing; i++) {
      const onLine = Float64Array.of(lastCentred + ((next - lastCentred) * i) / (missing + 1));
      filterInto(filter, onLine, onLine, 0, 1);
    }
  }
  for (const band of channel.bands) {
    const settling = band.cascade === null ? 0 : Math.ceil((SETTLING_PERIODS * rateHz) / band.upToHz);
    if (short && band.watched < settling) continue;
    band.settling = settling;
    band.watched = 0;
    band.watches.forEach(resumeLevel);
  }
}

/** Sums the features of each tick; `filtered` holds what is above the noise edge. */
function gatherTicks(
  channel: Channel,
  samples: Float32Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  sink: ChannelSink,
): void {
  let at = from;
  while (at < to) {
    const number = Math.floor(microsAt(at) / TICK_MICROS);
    if (channel.tick?.number !== number) {
      finishTick(channel);
      channel.tick = { number, samples: 0, noisePower: 0, pulses: [] };
    }
    const end = firstAtOrAfter((number + 1) * TICK_MICROS, at, to, channel.sensor.rateHz, microsAt);
    let power = channel.tick.noisePower;
    if (channel.deck) for (let i = at; i < end; i++) power += filtered[i]! * filtered[i]!;
    channel.tick.noisePower = power;
    channel.tick.samples += end - at;
    if (channel.pulses !== null) {
      findPulses(channel.pulses, samples, at, end, channel.sensor.rateHz, (index, height) => {
        const micros = Math.round(microsAt(at) + ((index - at) * MICROS_PER_SECOND) / channel.sensor.rateHz);
        channel.tick!.pulses.push(micros);
        sink.pulse(channel, micros, height);
      });
    }
    at = end;
  }
}

/** First index from `at` on whose time is not before `micros`; `to` if there is none. */
function firstAtOrAfter(
  micros: Micros,
  at: number,
  to: number,
  rateHz: number,
  microsAt: (index: number) => Micros,
): number {
  let index = Math.min(to, at + Math.max(1, Math.ceil(((micros - microsAt(at)) * rateHz) / MICROS_PER_SECOND)));
  while (index > at + 1 && microsAt(index - 1) >= micros) index -= 1;
  while (index < to && microsAt(index) < micros) index += 1;
  return index;
}

/** The clock went back: what is not yet handed on belongs to a time that comes again. */
function dropTicks(channel: Channel): void {
  channel.ticks = [];
  channel.tick = null;
  for (const { watches } of channel.bands) for (const watch of watches) watch.aboveTicks = [];
}

function finishTick(channel: Channel): void {
  if (channel.tick === null) return;
  channel.ticks.push(channel.tick);
  channel.through = channel.tick.number;
  channel.tick = null;
}
