/**
 * A number with its noun.
 *
 * @param number how many
 * @param one the noun for one of them
 * @param many the noun for any other number; `one` with an s where absent
 * @example counted(1, 'span') // '1 span'
 */
export function counted(number: number, one: string, many = `${one}s`): string {
  return `${number} ${number === 1 ? one : many}`;
}
