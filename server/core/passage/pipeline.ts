import type { SampleBlock } from '../contract/block.ts';
import { axleTracks, bridgeLengthM, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import type { Passage } from '../contract/passage.ts';
import type { PassageWindow, PipelineOutput, WindowChannel } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, timeName, type Micros } from '../contract/time.ts';
import { closeChannel, createChannel, feedChannel, type Channel, type ChannelSink } from './channel.ts';
import {
  createDetector,
  detect,
  interrupt,
  neededFrom,
  turnBack,
  type Detector,
  type DetectorEvent,
  type DetectorSetting,
  type TickFeatures,
} from './detector.ts';
import {
  closeExceedance,
  createExceedanceWatch,
  exceedanceNeeds,
  followExceedance,
  type Exceedance,
  type ExceedanceWatch,
} from './exceedance.ts';
import { createLiveSpeed, noteLivePulse, type LiveSpeed } from './live-speed.ts';
import { measurePassage } from './measure.ts';
import { forgetBefore, recall } from './memory.ts';
import { RULE, RULE_VERSION, TICK_MICROS } from './rule.ts';
import type { AxleTrack } from './standing.ts';

/** State layout and rules; a stored state of another version is not taken up again. */
export const PIPELINE_VERSION = `1/${RULE_VERSION}`;

/**
 * The pipeline of one bridge: samples in, measures out, in event time only. Plain data, so that it can be cloned,
 * stored and continued elsewhere to the same bits.
 */
export interface PipelineState {
  definition: BridgeDefinition;
  definitionVersion: number;
  channels: Channel[];
  detector: Detector;
  setting: DetectorSetting;
  exceedance: ExceedanceWatch;
  liveSpeed: LiveSpeed;
  vitalsMinute: number;
}

/** A pipeline that has seen nothing yet. */
export function createPipeline(definition: BridgeDefinition, definitionVersion: number): PipelineState {
  const channels = definition.sensors.map((sensor) => createChannel(definition, sensor));
  return {
    definition,
    definitionVersion,
    channels,
    detector: createDetector(),
    setting: {
      bridge: definition.id,
      freeSeconds: freeSeconds(definition),
      axleTracks: axleTracks(definition).map(trackOf),
    },
    exceedance: createExceedanceWatch(),
    liveSpeed: createLiveSpeed(),
    vitalsMinute: -1,
  };
}

/**
 * Takes one block and says what follows from it. Any split of the same samples into blocks, empty ones and single
 * samples among them, gives the same passages and level events, bit for bit.
 *
 * @param state changed
 * @param block raw samples in the sensors' units; channels that the bridge does not have are passed over
 */
export function step(state: PipelineState, block: SampleBlock): PipelineOutput {
  const output = emptyOutput();
  const sink = sinkOf(state, output);
  for (const { sensor, samples } of block.channels) {
    const channel = state.channels.find(({ sensor: { id } }) => id === sensor);
    if (channel !== undefined) feedChannel(channel, state.definition.id, block.startMicros, samples, sink);
  }
  closeTicks(state, output, false);
  return settled(state, output);
}

/** The end of a recording: everything still open is measured with the samples there are. */
export function finish(state: PipelineState): PipelineOutput {
  const output = emptyOutput();
  const sink = sinkOf(state, output);
  for (const channel of state.channels) closeChannel(channel, state.definition.id, sink);
  closeTicks(state, output, true);
  act(state, interrupt(state.detector, state.setting), output);
  recordExceedance(state, closeExceedance(state.exceedance, state.detector.lastTick), output);
  return settled(state, output);
}

/** The passage computed again from its stored wave form. */
export function recompute(
  definition: BridgeDefinition,
  definitionVersion: number,
  stored: Passage,
  channels: readonly WindowChannel[],
): Passage | null {
  const { foundBy, onMicros, offMicros } = stored.phases;
  const frame = {
    id: stored.id,
    triggerMicros: stored.triggerMicros,
    fromMicros: stored.startMicros,
    toMicros: stored.endMicros,
    cut: stored.cut,
    whole: foundBy === 'given',
    ...(foundBy === 'live level' ? { above: { fromMicros: onMicros, toMicros: offMicros } } : {}),
  };
  return measurePassage(definition, definitionVersion, frame, channels);
}

/** Takes a whole recording as one event, train or not: for tests on site and odd vehicles. */
export function measureWhole(
  definition: BridgeDefinition,
  definitionVersion: number,
  channels: readonly WindowChannel[],
): PassageWindow | null {
  const runs = channels.flatMap(({ runs, rateHz }) => runs.map((run) => ({ ...run, rateHz })));
  if (runs.length === 0) return null;
  const fromMicros = Math.min(...runs.map((run) => run.startMicros));
  const toMicros = Math.max(
    ...runs.map((run) => run.startMicros + Math.floor((run.samples.length * MICROS_PER_SECOND) / run.rateHz)),
  );
  const id = `${definition.id}-${timeName(fromMicros)}`;
  const frame = { id, triggerMicros: fromMicros, fromMicros, toMicros, cut: null, whole: true };
  const passage = measurePassage(definition, definitionVersion, frame, channels);
  return passage === null ? null : { passage, channels: [...channels] };
}

function emptyOutput(): PipelineOutput {
  const none = { levels: [], passages: [], progress: [], axles: [], spectra: [], health: [], vitals: [], live: [] };
  return { ...none, settledMicros: null };
}

/** No window begins before the samples that are still kept for it. */
function settled(state: PipelineState, output: PipelineOutput): PipelineOutput {
  if (state.detector.lastTick >= 0) output.settledMicros = keptFrom(state);
  return output;
}

function sinkOf(state: PipelineState, output: PipelineOutput): ChannelSink {
  return {
    level: (event) => output.levels.push(event),
    live: (samples) => output.live.push(samples),
    spectrum: (line) => output.spectra.push(line),
    condition: (condition) => output.health.push(condition),
    pulse: (channel, micros) => {
      const speedMs = noteLivePulse(state.liveSpeed, channel.sensor, micros);
      output.axles.push({
        bridge: state.definition.id,
        passage: state.detector.open?.id ?? null,
        sensor: channel.sensor.id,
        micros,
        alongM: channel.sensor.alongM,
        speedMs,
      });
    },
  };
}

/** Hands finished ticks to the detector, in order, once every channel that is waited for has passed them. */
function closeTicks(state: PipelineState, output: PipelineOutput, all: boolean): void {
  const taking = state.channels.filter(({ slow }) => !slow);
  for (;;) {
    leavePast(state, taking, output);
    const number = Math.min(...taking.map(({ ticks }) => ticks[0]?.number ?? Infinity));
    if (number === Infinity) break;
    if (!all && !complete(taking, number)) break;
    const features = takeTick(taking, number, state.liveSpeed.speedMs);
    act(state, detect(state.detector, state.setting, features), output);
    const busy = state.detector.open !== null || state.detector.ringing !== null;
    const exceedance = followExceedance(state.exceedance, number, takeAbove(taking, number), busy);
    recordExceedance(state, exceedance, output);
    tellVitals(state, number, output);
  }
  trimMemories(state);
}

/**
 * Ticks that the detector has passed say nothing more: a channel that lagged has caught up with less than it missed. But
 * where every channel that is waited for has gone back in time, the bridge's time has gone back.
 */
function leavePast(state: PipelineState, channels: readonly Channel[], output: PipelineOutput): void {
  const { lastTick } = state.detector;
  const waitedFor = channels.filter((channel) => channel.waitedFor);
  if (waitedFor.length > 0 && waitedFor.every(({ through }) => through < lastTick)) {
    act(state, turnBack(state.detector, state.setting), output);
    recordExceedance(state, closeExceedance(state.exceedance, lastTick), output);
    return;
  }
  for (const { ticks } of channels) while (ticks[0] !== undefined && ticks[0].number <= lastTick) ticks.shift();
}

/** A channel that has fallen `waitTicks` behind is not waited for until it is abreast again. */
function complete(channels: readonly Channel[], number: number): boolean {
  const ahead = Math.max(...channels.map(({ ticks }) => ticks.length));
  for (const channel of channels) {
    if (channel.through >= number) channel.waitedFor = true;
    else if (channel.waitedFor && ahead > RULE.waitTicks) channel.waitedFor = false;
  }
  return channels.every((channel) => channel.through >= number || !channel.waitedFor);
}

function takeTick(channels: readonly Channel[], number: number, liveSpeedMs: number | null): TickFeatures {
  const speedMs = liveSpeedMs === null ? null : Math.abs(liveSpeedMs);
  const features: TickFeatures = { number, powers: [], pulses: [], speedMs };
  for (const channel of channels) {
    while (channel.ticks[0] !== undefined && channel.ticks[0].number <= number) {
      const tick = channel.ticks.shift()!;
      if (tick.number !== number) continue;
      if (channel.deck) features.powers.push({ sensor: channel.sensor.id, power: tick.noisePower / tick.samples });
      for (const micros of tick.pulses) features.pulses.push({ sensor: channel.sensor.id, micros });
    }
  }
  return features;
}

/** Whether a live level was passed in a tick, on any channel. */
function takeAbove(channels: readonly Channel[], number: number): boolean {
  let above = false;
  for (const { aboveTicks } of channels.flatMap(({ bands }) => bands.flatMap(({ watches }) => watches))) {
    while (aboveTicks[0] !== undefined && aboveTicks[0] <= number) above = aboveTicks.shift() === number || above;
  }
  return above;
}

function act(state: PipelineState, events: readonly DetectorEvent[], output: PipelineOutput): void {
  const bridge = state.definition.id;
  for (const event of events) {
    if (event.kind !== 'window') {
      output.progress.push({ bridge, passage: event.candidate.id, kind: event.kind, micros: event.micros });
      continue;
    }
    const { candidate, fromMicros, toMicros } = event;
    const channels = cutWindow(state, fromMicros, toMicros);
    const { id, cut } = candidate;
    const frame = { id, triggerMicros: candidate.onsetTick * TICK_MICROS, fromMicros, toMicros, cut };
    const passage = measurePassage(state.definition, state.definitionVersion, frame, channels);
    if (passage === null) output.progress.push({ bridge, passage: candidate.id, kind: 'discarded', micros: toMicros });
    else {
      output.passages.push({ passage, channels });
      state.exceedance.recorded = { fromMicros, toMicros };
    }
  }
}

/** The record of a level that was passed without a train. */
function recordExceedance(state: PipelineState, exceedance: Exceedance | null, output: PipelineOutput): void {
  if (exceedance === null) return;
  const { above, window } = exceedance;
  const channels = cutWindow(state, window.fromMicros, window.toMicros);
  const id = `${state.definition.id}-${timeName(above.fromMicros)}`;
  const frame = { id, triggerMicros: above.fromMicros, ...window, cut: null, above };
  const passage = measurePassage(state.definition, state.definitionVersion, frame, channels);
  if (passage !== null) output.passages.push({ passage, channels });
}

/** A temperature may be this old and still hold for a passage. */
const TEMPERATURE_MICROS = 15 * 60 * MICROS_PER_SECOND;

/**
 * The samples of a window. Of slow channels the newest sample from before the window is taken, since it is sure to be
 * there whenever the window is cut.
 */
function cutWindow(state: PipelineState, fromMicros: Micros, toMicros: Micros): WindowChannel[] {
  return state.channels.flatMap((channel) => {
    const { rateHz, id } = channel.sensor;
    if (!channel.slow) {
      const runs = recall(channel.memory, fromMicros, toMicros);
      return runs.length > 0 ? [{ sensor: id, rateHz, runs }] : [];
    }
    const last = recall(channel.memory, fromMicros - TEMPERATURE_MICROS, fromMicros).at(-1);
    if (last === undefined) return [];
    const index = last.samples.length - 1;
    const startMicros = last.startMicros + Math.round((index * MICROS_PER_SECOND) / rateHz);
    return [{ sensor: id, rateHz, runs: [{ startMicros, samples: last.samples.slice(index) }] }];
  });
}

/** From when on samples may still be needed. */
function keptFrom({ detector, exceedance }: PipelineState): Micros {
  return Math.min(neededFrom(detector, detector.lastTick * TICK_MICROS), exceedanceNeeds(exceedance));
}

function trimMemories(state: PipelineState): void {
  if (state.detector.lastTick < 0) return;
  const needed = keptFrom(state);
  for (const channel of state.channels) {
    forgetBefore(channel.memory, channel.slow ? needed - TEMPERATURE_MICROS : needed);
  }
}

function tellVitals(state: PipelineState, tick: number, output: PipelineOutput): void {
  const minute = Math.floor(tick / 600);
  if (minute === state.vitalsMinute) return;
  state.vitalsMinute = minute;
  const told = state.channels.filter(({ newest }) => newest !== null);
  for (const { sensor, vitals, newest } of told) {
    const { samples, noise, offset } = vitals;
    output.vitals.push({ bridge: state.definition.id, sensor: sensor.id, micros: newest!, samples, noise, offset });
  }
}

/** Between the outermost sensors of a track: four axles every 13 m, the densest vehicles in use, and a bogie over. */
function trackOf(track: readonly Sensor[]): AxleTrack {
  const places = track.map(({ alongM }) => alongM);
  const lengthM = Math.max(...places) - Math.min(...places);
  return { sensors: track.map(({ id }) => id), lengthM, room: 4 * Math.ceil(lengthM / 13) + 2 };
}

/** How long the first mode takes to ring off: four time constants of the slowest span, within bounds. */
function freeSeconds(definition: BridgeDefinition): number {
  const constants = definition.spans.map(({ frequenciesHz, dampingPercent }) => {
    const f1 = frequenciesHz?.f1;
    return f1 === undefined || dampingPercent === undefined ? 5 : 1 / (2 * Math.PI * f1 * (dampingPercent / 100));
  });
  const wanted = RULE.freeTimeConstants * Math.max(...constants);
  // The longest bridge also lets its last axle roll off behind the last sensor.
  const rollOff = bridgeLengthM(definition) / 20;
  return Math.min(RULE.freeSecondsMost, Math.max(RULE.freeSecondsLeast, wanted)) + Math.min(rollOff, 5);
}
