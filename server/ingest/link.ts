/** A message as a broker hands it on. */
export interface Incoming {
  topic: string;
  payload: Uint8Array;
  retain: boolean;
}

/**
 * Takes a message in; called in the order of arrival. Resolves when it may be acknowledged; rejects when it was not
 * kept and must come again.
 */
export type Take = (message: Incoming) => Promise<void>;

export interface PublishOptions {
  retain?: boolean;
  qos?: 0 | 1;
}

export interface LinkStatus {
  kind: 'embedded' | 'outside';
  connected: boolean;
  /** Without credentials. */
  address: string;
}

/** The way to the loggers, over a broker of our own or over another's. */
export interface Link {
  publish(topic: string, payload: Uint8Array | string, options?: PublishOptions): Promise<void>;
  status(): LinkStatus;
  /** Subscribes again, after definitions have changed. */
  refresh(): void;
  stop(): Promise<void>;
}
