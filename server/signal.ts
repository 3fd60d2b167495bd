/** npm passes on the Ctrl-C that the terminal has sent to all: one wish, heard twice. */
const ECHO_MS = 500;
const LOOK_AT_PARENT_MS = 1_000;

/** The first signal stops in order, a second one at once. */
export function stopOnSignal(stop: () => Promise<void>): void {
  let askedMs: number | null = null;
  const end = (signal: NodeJS.Signals): void => {
    const nowMs = performance.now();
    if (askedMs !== null) {
      if (nowMs - askedMs > ECHO_MS) process.exit(signal === 'SIGINT' ? 130 : 143);
      return;
    }
    askedMs = nowMs;
    if (process.stdout.isTTY) process.stdout.write('\nstopping …\n');
    stop().then(
      () => process.exit(),
      (failure: unknown) => {
        process.stderr.write(`${String(failure)}\n`);
        process.exit(1);
      },
    );
  };
  process.on('SIGINT', end);
  process.on('SIGTERM', end);
}

/**
 * Whoever kills npm means the program that npm runs. A signal that npm does not pass on (SIGKILL, SIGHUP) leaves this
 * process without its parent, which is taken for SIGTERM. Only under npm: elsewhere a parent may end and mean nothing by
 * it, as a shell does that has put a server into the background.
 */
export function endWithNpm(): void {
  if (process.env['npm_lifecycle_script']?.includes('server/main.ts') !== true) return;
  const parent = process.ppid;
  const looking = setInterval(() => {
    if (process.ppid === parent) return;
    clearInterval(looking);
    process.kill(process.pid, 'SIGTERM');
  }, LOOK_AT_PARENT_MS);
  looking.unref();
}
