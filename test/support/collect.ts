/** All that an asynchronous source gives, as a list. */
export async function collect<T>(source: AsyncIterable<T>): Promise<T[]> {
  const found: T[] = [];
  for await (const each of source) found.push(each);
  return found;
}
