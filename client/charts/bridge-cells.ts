import type { BridgeView } from '#core/contract/api.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { SensorHealth } from '#core/contract/health.ts';
import { chainage, list, plural, temperature } from '../format.ts';
import { clockIn, dateIn, zoneWord } from '../time.ts';

/** What the title block says of a bridge: its name, spans, definition, loggers, and how warm it is. */
export function bridgeCells(view: BridgeView, health: readonly SensorHealth[], zone: string): [string, string][] {
  const { definition } = view;
  const warm = temperatures(definition, health, zone);
  return [
    ['Bridge', `${definition.name}, km ${chainage(definition.chainageKm)}`],
    ['Span and track', spansOf(definition)],
    ['Definition', versionOf(view, zone)],
    ['Logger', loggersOf(definition)],
    ...(warm === '' ? [] : [['Temperature, newest sample', warm] satisfies [string, string]]),
  ];
}

function spansOf({ spans }: BridgeDefinition): string {
  const kinds = [...new Set(spans.map(({ structure }) => structure))];
  const lengths = [...new Set(spans.map(({ lengthM }) => lengthM.toFixed(2)))];
  const size = lengths.length === 1 && spans.length > 1 ? `${spans.length} × ${lengths[0]!}` : lengths.join(' + ');
  return `${size} m ${list(kinds)}, ${spans[0]!.track}, ${plural(spans[0]!.tracks ?? 1, 'track')}`;
}

function versionOf({ version, versions }: BridgeView, zone: string): string {
  const found = versions.find((each) => each.version === version);
  return `version ${version}${found ? `, in force since ${dateIn(found.sinceMicros, zone).slice(4)}` : ''}`;
}

/** The rates of slow channels, such as thermometers, say nothing here. */
function loggersOf({ loggers, sensors }: BridgeDefinition): string {
  const rates = new Set(sensors.map(({ rateHz }) => rateHz).filter((rateHz) => rateHz >= 5));
  return `${list(loggers.map(({ id }) => id))}, ${[...rates].toSorted((a, b) => a - b).join(' and ')} Hz`;
}

/** The newest sample of each thermometer as it was measured, and when; those of one second share their time. */
function temperatures({ sensors }: BridgeDefinition, health: readonly SensorHealth[], zone: string): string {
  const words: { text: string; at: string }[] = [];
  for (const { id } of sensors.filter(({ quantity }) => quantity === 'temperature')) {
    const reading = health.find(({ sensor }) => sensor === id)?.reading;
    const at = reading ? ` °C at ${clockIn(reading.micros, zone)} ${zoneWord(zone)}` : '';
    const text = `${id} ${reading ? temperature(reading.value) : 'no sample yet'}`;
    const last = words.at(-1);
    if (last?.at === at) last.text += `, ${text}`;
    else words.push({ text, at });
  }
  return words.map(({ text, at }) => text + at).join('; ');
}
