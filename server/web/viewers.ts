import type { WebSocket } from 'ws';
import { CLOSE } from '#core/contract/live.ts';

export interface ViewerLimits {
  /** Bytes waiting in the socket from which a viewer counts as slow. */
  slowBytes: number;
  /** A viewer that stays slow for longer is dropped. */
  slowMs: number;
  /** Messages and bytes held for a slow viewer; beyond, it is dropped at once. */
  heldMessages: number;
  heldBytes: number;
  /** Messages from the viewer in one second. */
  messagesPerSecond: number;
  /** Malformed messages until it is closed. */
  malformed: number;
}

export const VIEWER_LIMITS: ViewerLimits = {
  slowBytes: 256 * 1024,
  slowMs: 10_000,
  heldMessages: 500,
  heldBytes: 1024 * 1024,
  messagesPerSecond: 20,
  malformed: 20,
};

/** A message that is encoded once for all viewers. While a viewer is slow, a later one of the same key replaces it. */
export interface SharedText {
  key: string;
  bytes: Buffer;
}

export function sharedText(key: string, message: unknown): SharedText {
  return { key, bytes: Buffer.from(JSON.stringify(message)) };
}

/** What happened to a frame or message. */
export type Delivery = 'sent' | 'held' | 'skipped' | 'dropped';

/**
 * One page that looks on. Nothing that is kept for it grows with time: frames are skipped while it is slow, and messages
 * held up to a limit.
 */
export interface Viewer {
  readonly socket: WebSocket;
  /** A message; held while the viewer is slow. */
  tell(text: SharedText): Delivery;
  /** A frame; skipped while the viewer is slow. */
  show(bytes: Uint8Array): Delivery;
  /** Called at each flush. @returns true where it has just caught up after skipped frames */
  tend(nowMs: number): boolean;
  /** Counts a message from the viewer. @returns false where they come too fast */
  heard(nowMs: number): boolean;
  /** Counts a malformed message. @returns true where it was one too many and the viewer is closed */
  misspoke(): boolean;
  drop(code: number, reason: string): void;
}

/** How long a closing handshake may take until the socket is cut. */
const CLOSING_MS = 1_000;

/** @param onSlow told once when the viewer is dropped for being slow */
export function createViewer(socket: WebSocket, limits: ViewerLimits, onSlow: (reason: string) => void): Viewer {
  const held = new Map<string, Buffer>();
  let heldBytes = 0;
  let slowSinceMs: number | null = null;
  let skipped = false;
  let second = -1;
  let heardInSecond = 0;
  let malformed = 0;
  let gone = false;

  const isSlow = (): boolean => socket.bufferedAmount > limits.slowBytes;

  const drop = (code: number, reason: string): void => {
    if (gone) return;
    gone = true;
    held.clear();
    socket.close(code, reason);
    // The closing message waits behind what a slow viewer does not read.
    const cut = setTimeout(() => socket.terminate(), CLOSING_MS);
    cut.unref();
    socket.once('close', () => clearTimeout(cut));
  };
  const dropSlow = (reason: string): 'dropped' => {
    if (!gone) onSlow(reason);
    drop(CLOSE.slow, reason);
    return 'dropped';
  };
  const hold = ({ key, bytes }: SharedText): Delivery => {
    heldBytes += bytes.length - (held.get(key)?.length ?? 0);
    held.delete(key);
    held.set(key, bytes);
    if (held.size <= limits.heldMessages && heldBytes <= limits.heldBytes) return 'held';
    return dropSlow(`${held.size} messages waited`);
  };

  return {
    socket,
    drop,
    tell(text) {
      if (gone || socket.readyState !== socket.OPEN) return 'dropped';
      if (held.size > 0 || isSlow()) return hold(text);
      socket.send(text.bytes, { binary: false });
      return 'sent';
    },
    show(bytes) {
      if (gone || socket.readyState !== socket.OPEN) return 'dropped';
      if (skipped || isSlow()) {
        skipped = true;
        return 'skipped';
      }
      socket.send(bytes);
      return 'sent';
    },
    tend(nowMs) {
      if (gone || socket.readyState !== socket.OPEN) return false;
      if (isSlow()) {
        slowSinceMs ??= nowMs;
        if (nowMs - slowSinceMs >= limits.slowMs) dropSlow(`slow for ${Math.round((nowMs - slowSinceMs) / 1000)} s`);
        return false;
      }
      slowSinceMs = null;
      for (const bytes of held.values()) socket.send(bytes, { binary: false });
      held.clear();
      heldBytes = 0;
      const caughtUp = skipped;
      skipped = false;
      return caughtUp;
    },
    heard(nowMs) {
      if (Math.floor(nowMs / 1000) !== second) {
        second = Math.floor(nowMs / 1000);
        heardInSecond = 0;
      }
      heardInSecond += 1;
      return heardInSecond <= limits.messagesPerSecond;
    },
    misspoke() {
      malformed += 1;
      if (malformed < limits.malformed) return false;
      drop(1008, `${malformed} messages were not understood`);
      return true;
    },
  };
}
