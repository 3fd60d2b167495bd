import type { Alarm } from '../contract/alarm.ts';
import { spanAt, type BridgeDefinition } from '../contract/bridge.ts';
import { severityOf, type Severity } from '../contract/severity.ts';
import type { Fault } from './fault.ts';
import { civilTime, MICROS_PER_SECOND, type Micros } from '../contract/time.ts';

const LEVEL_NAMES: Readonly<Record<Severity, string>> = {
  AL: 'alert limit',
  IL: 'intervention limit',
  IAL: 'immediate action limit',
};

/** Ends each sentence: what an alarm is and is not. */
const ADVISORY = 'advisory: a reason to look, without authority over train movement';

/**
 * One sentence for the duty engineer: bridge, span, value, limit, by how much, sensor, and what the record says.
 *
 * @param alarm of kind `level`
 */
export function levelMessage(definition: BridgeDefinition, alarm: Alarm): string {
  const parts = [`${placeOf(definition, alarm)}: ${liveClause(definition, alarm)}`];
  if (alarm.liveValue !== null) parts.push(...recordClause(alarm));
  if (alarm.doubt !== null) parts.push(`doubtful, since ${alarm.doubt.replaceAll('; ', ', and ')}`);
  return `${[...parts, ADVISORY].join('; ')}.`;
}

/** One sentence about a logger that sends nothing, and has not for at least so long. */
export function noDataMessage(
  definition: BridgeDefinition,
  logger: string,
  sinceMicros: Micros,
  lastedMicros: Micros,
): string {
  return (
    `${definition.name}: no data from logger ${logger} since ${clockTime(sinceMicros)}, for more than ` +
    `${Number((lastedMicros / MICROS_PER_SECOND).toFixed(1))} s; ` +
    `what it measures is not monitored, and the absence of alarms says nothing; ${ADVISORY}.`
  );
}

/** One sentence about a sensor that cannot be trusted, or whose logger's clock cannot. */
export function sensorMessage(definition: BridgeDefinition, sensor: string, faults: readonly Fault[]): string {
  const own = faults.filter(({ code }) => code !== 'clock step').map(markedWords);
  const clock = faults.findLast(({ code }) => code === 'clock step');
  const logger = definition.sensors.find(({ id }) => id === sensor)?.logger ?? `of ${sensor}`;
  const parts = [
    ...(own.length === 0
      ? []
      : [`sensor ${sensor} is ${own.join(' and ')}; its values are not to be trusted until it is seen to`]),
    ...(clock === undefined
      ? []
      : [
          `the clock of logger ${logger} stepped${inBrackets(clock.detail)}; ` +
            'the times of what it measures are not to be trusted until its clock is seen to',
        ]),
  ];
  return `${definition.name}: ${[...parts, ADVISORY].join('; ')}.`;
}

const markedWords = ({ code, detail }: Fault): string => `marked "${code}"${inBrackets(detail)}`;
const inBrackets = (detail: string): string => (detail === '' ? '' : ` (${detail.replaceAll('; ', ', ')})`);

/** `05:12:33 UTC on 2026-12-01`. */
function clockTime(micros: Micros): string {
  const { year, month, day, hour, minute, second } = civilTime(Math.floor(micros / MICROS_PER_SECOND));
  const two = (n: number): string => String(n).padStart(2, '0');
  return `${two(hour)}:${two(minute)}:${two(second)} UTC on ${year}-${two(month)}-${two(day)}`;
}

function placeOf(definition: BridgeDefinition, alarm: Alarm): string {
  const sensor = definition.sensors.find(({ id }) => id === alarm.sensor);
  return sensor === undefined ? definition.name : `${definition.name}, span ${spanAt(definition, sensor.alongM).id}`;
}

function liveClause(definition: BridgeDefinition, alarm: Alarm): string {
  const value = alarm.liveValue ?? alarm.recordValue ?? 0;
  const source =
    alarm.liveValue === null
      ? `the record finds a deck acceleration of ${atLeast(alarm)}`.trimEnd()
      : 'deck acceleration';
  const verb = alarm.liveValue === null ? ',' : ' is';
  const at = alarm.sensor === null ? '' : ` at ${alarm.sensor}`;
  const levels = definition.limits.find(({ id }) => id === alarm.rule)?.levels;
  const severity = (levels === undefined ? null : severityOf(value, levels)) ?? alarm.severity;
  const level = levels?.[severity];
  if (level === undefined) return `${source} ${value.toFixed(2)} m/s²${at}${verb} above the ${LEVEL_NAMES[severity]}`;
  const by = value - level;
  return (
    `${source} ${value.toFixed(2)} m/s²${at}${verb} ${by.toFixed(2)} m/s² (${((100 * by) / level).toFixed(1)} %) above the ` +
    `${LEVEL_NAMES[severity]} of ${level.toFixed(2)} m/s² (${severity}, limit ${alarm.rule})`
  );
}

function recordClause(alarm: Alarm): string[] {
  const { verdict, recordValue, recordSeverity } = alarm;
  const reaches = recordSeverity === null ? 'below all limits' : recordSeverity;
  const value = `${atLeast(alarm)}${(recordValue ?? 0).toFixed(2)} m/s²`;
  switch (verdict) {
    case null:
      return [];
    case 'confirmed':
      return [`the record confirms ${reaches} with ${value}`];
    case 'corrected':
      return [`the record corrects it to ${value} (${reaches})`];
    case 'inconclusive': {
      const why = alarm.steps.findLast(({ what }) => what === 'inconclusive')?.note ?? 'cannot judge it';
      return [`the record ${why.replaceAll('; ', ', ')}: the live value stands`];
    }
    case 'no passage':
      return ['no train was recognised and no record was made: the live value stands'];
  }
}

const atLeast = ({ recordAtLeast }: Alarm): string => (recordAtLeast === true ? 'at least ' : '');
