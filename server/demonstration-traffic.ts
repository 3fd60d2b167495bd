import { parentPort, workerData } from 'node:worker_threads';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { startDemonstration } from '../simulator/demonstration.ts';

/** What the thread of the simulated loggers is given. */
export interface TrafficWork {
  brokerUrl: string;
  root: string;
  seed: number;
  definitions: readonly BridgeDefinition[];
}

/** The demonstration's loggers, in a thread of their own so that they slow nobody. Ends on any message. */
if (parentPort !== null) {
  const running = await startDemonstration({ ...(workerData as TrafficWork), clock: () => Date.now() * 1000 });
  parentPort.once('message', () => {
    void running.stop().finally(() => parentPort?.close());
  });
}
