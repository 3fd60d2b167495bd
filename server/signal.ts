/** The first signal stops in order, a second one at once. */
export function stopOnSignal(stop: () => Promise<void>): void {
  let asked = false;
  const end = (signal: NodeJS.Signals): void => {
    if (asked) process.exit(signal === 'SIGINT' ? 130 : 143);
    asked = true;
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
