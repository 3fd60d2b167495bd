/** The figures behind a picture: what its table shows and its CSV holds. */
export interface Table {
  /** Column heads, units included. */
  columns: string[];
  rows: Cell[][];
  /** Said above a table that shows fewer rows than the CSV holds. */
  note?: string;
}
export type Cell = string | number | null;

/**
 * CSV after RFC 4180: comma, CRLF, quotes doubled. A missing value is an empty field.
 *
 * @example csvOf({ columns: ['t, s', 'a, m/s²'], rows: [[0, 1.5], [1, null]] }) // '"t, s","a, m/s²"\r\n0,1.5\r\n1,\r\n'
 */
export function csvOf(table: Table): string {
  return [table.columns, ...table.rows].map((row) => row.map(field).join(',') + '\r\n').join('');
}

function field(cell: Cell): string {
  if (cell === null) return '';
  if (typeof cell === 'number') return String(cell);
  // A leading =, +, -, @ makes some spreadsheets run the text as a formula.
  const safe = /^[=+\-@\t\r]/.test(cell) ? `'${cell}` : cell;
  return /[",\r\n]/.test(safe) ? `"${safe.replaceAll('"', '""')}"` : safe;
}

/** Hands a file to the reader. */
export function save(content: Blob | string, name: string, type = 'text/csv;charset=utf-8'): void {
  const blob = typeof content === 'string' ? new Blob([content], { type }) : content;
  const link = document.createElement('a');
  link.href = URL.createObjectURL(blob);
  link.download = name;
  link.click();
  // The browser has taken hold of the content once the click is handled.
  setTimeout(() => URL.revokeObjectURL(link.href), 1000);
}
