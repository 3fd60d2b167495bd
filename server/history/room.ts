/** Counts work in hand and lets others wait while there is too much of it. */
export interface Room {
  /** Counts it until it is settled. */
  hold<T>(work: Promise<T>): Promise<T>;
  held(): number;
  /** Null where there is room; else resolves when no more than half of the limit is held. */
  free(): Promise<void> | null;
}

export function createRoom(limit: number): Room {
  let held = 0;
  let waiting: (() => void)[] = [];
  return {
    async hold(work) {
      held += 1;
      try {
        return await work;
      } finally {
        held -= 1;
        if (held <= limit / 2) {
          for (const resume of waiting) resume();
          waiting = [];
        }
      }
    },
    held: () => held,
    free: () => (held <= limit ? null : new Promise<void>((resolve) => waiting.push(resolve))),
  };
}
