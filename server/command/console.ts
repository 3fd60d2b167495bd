import type { Console } from './outcome.ts';

/**
 * The process's own streams. A reader that goes away, as `head` does, ends the program quietly: nobody is left to
 * tell.
 */
export function processConsole(): Console {
  for (const stream of [process.stdout, process.stderr]) {
    stream.on('error', (error: NodeJS.ErrnoException) => {
      if (error.code === 'EPIPE') process.exit();
      throw error;
    });
  }
  return {
    out: (text) =>
      new Promise((resolve) => {
        if (process.stdout.write(text)) resolve();
        else process.stdout.once('drain', resolve);
      }),
    err: (text) => void process.stderr.write(text),
  };
}
