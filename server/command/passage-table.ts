import type { Measured } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import { civilTime, MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';

interface TableColumn {
  title: string;
  width: number;
  left?: true;
  text: (passage: Passage) => string;
}

/** Shown where a value cannot be had; the reason is in the JSON. */
const NOT_MEASURABLE = '–';

const COLUMNS: readonly TableColumn[] = [
  { title: 'passage', width: 34, left: true, text: ({ id }) => id },
  { title: 'first axle (UTC)', width: 21, left: true, text: ({ phases }) => timeText(phases.onMicros) },
  { title: 'direction', width: 9, left: true, text: (passage) => directionText(passage) },
  { title: 'speed [km/h]', width: 12, text: ({ speedMs }) => valueText(speedMs, 1, 3.6) },
  { title: 'axles', width: 5, text: ({ axleCount }) => valueText(axleCount, 0) },
  { title: 'peak [m/s²]', width: 11, text: ({ peak }) => valueText(peak.measured, 2) },
  { title: 'at', width: 8, left: true, text: ({ peak }) => peak.sensor ?? NOT_MEASURABLE },
  { title: 'level', width: 5, left: true, text: ({ peak }) => peak.severity ?? '' },
  { title: 'f1 [Hz]', width: 7, text: ({ f1Hz }) => valueText(f1Hz, 3) },
  { title: 'ζ1 [%]', width: 6, text: ({ zeta1 }) => valueText(zeta1, 2, 100) },
  { title: 'T [°C]', width: 6, text: ({ temperatureC }) => valueText(temperatureC, 1) },
  { title: 'quality', width: 7, left: true, text: ({ quality }) => quality },
];

/** Titles with units, in the columns of `tableRow`. */
export function tableHeader(): string {
  return row(COLUMNS.map((column) => ({ ...column, content: column.title })));
}

/** One passage as a line of the table. */
export function tableRow(passage: Passage): string {
  return row(COLUMNS.map((column) => ({ ...column, content: column.text(passage) })));
}

function row(cells: readonly (TableColumn & { content: string })[]): string {
  const texts = cells.map(({ content, width, left }) => (left ? content.padEnd(width) : content.padStart(width)));
  return `${texts.join('  ').trimEnd()}\n`;
}

function valueText(measured: Measured, decimals: number, factor = 1): string {
  return measured.value === null ? NOT_MEASURABLE : (measured.value * factor).toFixed(decimals);
}

function directionText({ direction, phases: { foundBy } }: Passage): string {
  if (foundBy === 'live level' || foundBy === 'given') return 'no train';
  return direction ?? NOT_MEASURABLE;
}

/** To the tenth of a second, UTC. */
export function timeText(micros: Micros): string {
  const tenths = Math.floor(micros / (MICROS_PER_SECOND / 10));
  const { year, month, day, hour, minute, second } = civilTime(Math.floor(tenths / 10));
  const two = (value: number): string => String(value).padStart(2, '0');
  return `${year}-${two(month)}-${two(day)} ${two(hour)}:${two(minute)}:${two(second)}.${tenths % 10}`;
}
