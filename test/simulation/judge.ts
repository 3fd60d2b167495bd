/** Child process of the campaign test: judges every `of`-th scene from `first` until it is told enough; one JSON line a scene. */
import { judgeScene } from './verdict.ts';

const [first, of, count, seed] = process.argv.slice(2).map(Number) as [number, number, number, number];
for (let index = first; index < count; index += of) {
  process.stdout.write(`${JSON.stringify(judgeScene(index, seed))}\n`);
}
