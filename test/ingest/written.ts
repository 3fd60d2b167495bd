/** What the writer of the journal's kill test puts into its record of a number. */
export function payloadOf(number: number): Buffer {
  const payload = Buffer.alloc(8 + ((number * 7919) % 3000), number % 251);
  payload.writeUInt32LE(number, 0);
  return payload;
}
