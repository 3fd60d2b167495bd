import { describe, expect, it } from 'vitest';
import { encodeFrame, type FrameHeader } from '#core/contract/frame.ts';
import { CLOSE, LIVE_VERSION } from '#core/contract/live.ts';
import { openLink, STALE_MS, waitMs, type Link, type LinkState, type Socket } from '../../client/link.ts';

class FakeSocket implements Socket {
  binaryType = '';
  onopen: (() => void) | null = null;
  onmessage: ((event: { data: unknown }) => void) | null = null;
  onclose: ((event: { code: number; reason: string }) => void) | null = null;
  sent: unknown[] = [];
  closed = false;

  send(text: string): void {
    this.sent.push(JSON.parse(text));
  }
  close(): void {
    this.closed = true;
  }
  says(message: object): void {
    this.onmessage?.({ data: JSON.stringify(message) });
  }
  breaks(code = 1006, reason = ''): void {
    this.onclose?.({ code, reason });
  }
}

/** A rim whose clock and timers go by hand. */
function workbench() {
  const sockets: FakeSocket[] = [];
  const timers = new Set<{ at: number; call: () => void }>();
  let now = 0;
  const heard: { messages: object[]; frames: number; restarts: number; garbled: string[]; states: LinkState[] } = {
    messages: [],
    frames: 0,
    restarts: 0,
    garbled: [],
    states: [],
  };
  const link: Link = openLink(
    {
      open: () => {
        const socket = new FakeSocket();
        sockets.push(socket);
        return socket;
      },
      now: () => now,
      after: (milliseconds, call) => {
        const timer = { at: now + milliseconds, call };
        timers.add(timer);
        return () => timers.delete(timer);
      },
      chance: () => 0,
    },
    {
      message: (message) => heard.messages.push(message),
      frame: () => heard.frames++,
      state: (state) => heard.states.push(state),
      restarted: () => heard.restarts++,
      garbled: (why) => heard.garbled.push(why),
    },
  );
  const pass = (milliseconds: number): void => {
    const end = now + milliseconds;
    for (;;) {
      const due = [...timers].filter(({ at }) => at <= end).sort((a, b) => a.at - b.at)[0];
      if (!due) break;
      timers.delete(due);
      now = due.at;
      due.call();
    }
    now = end;
  };
  const newest = (): FakeSocket => sockets[sockets.length - 1]!;
  return { link, heard, sockets, timers, pass, newest };
}

const hello = (run: string, version: number = LIVE_VERSION): object => ({
  type: 'hello',
  run,
  version,
  nowMicros: 0,
  alarms: [],
});

describe('the line to the server', () => {
  it('is live once the server has said who it is', () => {
    const { link, newest, heard } = workbench();
    newest().onopen?.();
    expect(link.state.kind).toBe('connecting');
    newest().says(hello('a'));
    expect(link.state.kind).toBe('live');
    expect(heard.messages).toHaveLength(1);
  });

  it('asks again for what was watched after it broke', () => {
    const { link, newest, pass, sockets } = workbench();
    newest().onopen?.();
    newest().says(hello('a'));
    link.watch({ bridge: 'sallow', columnMicros: 20_000, pastS: 15 });
    expect(newest().sent).toEqual([{ type: 'watch', bridge: 'sallow', columnMicros: 20_000, pastS: 15 }]);
    newest().breaks();
    pass(600);
    expect(sockets).toHaveLength(2);
    newest().onopen?.();
    expect(newest().sent).toEqual([{ type: 'watch', bridge: 'sallow', columnMicros: 20_000, pastS: 15 }]);
  });

  it('remembers a wish made before it was open, and forgets one that was taken back', () => {
    const { link, newest } = workbench();
    link.watch({ bridge: 'sallow', columnMicros: 20_000 });
    link.unwatch();
    newest().onopen?.();
    expect(newest().sent).toEqual([]);
    link.watch({ bridge: 'fennick', columnMicros: 5_000 });
    expect(newest().sent).toEqual([{ type: 'watch', bridge: 'fennick', columnMicros: 5_000 }]);
  });

  it('tells since when it is lost, through all tries, and when the next one comes', () => {
    const { link, newest, pass } = workbench();
    newest().onopen?.();
    newest().says(hello('a'));
    pass(2000);
    newest().breaks();
    expect(link.state).toMatchObject({ kind: 'lost', sinceMs: 2000, retryAtMs: 2500, attempt: 1 });
    pass(500);
    newest().breaks();
    expect(link.state).toMatchObject({ kind: 'lost', sinceMs: 2000, retryAtMs: 3500, attempt: 2 });
  });

  it('waits longer from try to try, up to a limit, and begins anew after a success', () => {
    expect([1, 2, 3, 4, 5, 6, 60].map((attempt) => waitMs(attempt, 0))).toEqual([
      500, 1000, 2000, 4000, 8000, 15_000, 15_000,
    ]);
    const { link, newest, pass } = workbench();
    for (let i = 0; i < 4; i++) {
      newest().breaks();
      pass(15_000);
    }
    newest().onopen?.();
    newest().says(hello('a'));
    newest().breaks();
    expect(link.state).toMatchObject({ attempt: 1 });
  });

  it('spreads the tries of many viewers over half of the wait', () => {
    expect([waitMs(3, 0), waitMs(3, 0.5), waitMs(3, 1)]).toEqual([2000, 1500, 1000]);
  });

  it('tries at once when the reader asks, and only once', () => {
    const { link, newest, sockets, pass } = workbench();
    newest().breaks();
    link.retry();
    link.retry();
    expect(sockets).toHaveLength(2);
    pass(600);
    expect(sockets).toHaveLength(2);
  });

  it('is stale after three seconds without a sign of life, and live again with the next', () => {
    const { link, newest, pass } = workbench();
    newest().onopen?.();
    newest().says(hello('a'));
    pass(STALE_MS);
    expect(link.state.kind).toBe('live');
    pass(1001);
    expect(link.state).toEqual({ kind: 'stale', sinceMs: 0 });
    newest().says({ type: 'status' });
    expect(link.state.kind).toBe('live');
  });

  it('is opened anew when nothing at all comes any more, and is then lost since the last word', () => {
    const { link, newest, pass, sockets } = workbench();
    newest().onopen?.();
    newest().says(hello('a'));
    const first = newest();
    pass(11_001);
    expect(first.closed).toBe(true);
    expect(link.state).toMatchObject({ kind: 'lost', sinceMs: 0, reason: 'no sign of life' });
    pass(600);
    expect(sockets).toHaveLength(2);
  });

  it('gives up a server that never answers and tries another time', () => {
    const { link, pass, sockets } = workbench();
    pass(11_001);
    expect(link.state).toMatchObject({ kind: 'lost', reason: 'no answer' });
    pass(600);
    expect(sockets).toHaveLength(2);
  });

  it('tells that the server was restarted when its run is another one, not when it is the same', () => {
    const { newest, pass, heard } = workbench();
    for (const run of ['a', 'a', 'b']) {
      newest().onopen?.();
      newest().says(hello(run));
      newest().breaks();
      pass(600);
    }
    expect(heard.restarts).toBe(1);
  });

  it('stops at a server of another version instead of asking it for ever', () => {
    const { link, newest, pass, sockets } = workbench();
    newest().onopen?.();
    newest().says(hello('a', LIVE_VERSION + 1));
    expect(link.state).toEqual({ kind: 'other version', theirs: LIVE_VERSION + 1 });
    newest().breaks();
    pass(60_000);
    expect(sockets).toHaveLength(1);
  });

  it('stops when the server closes it for its version', () => {
    const { link, newest } = workbench();
    newest().breaks(CLOSE.version);
    expect(link.state.kind).toBe('other version');
  });

  it('says in words why the server closed it', () => {
    const reasons = [CLOSE.shutdown, CLOSE.slow, CLOSE.tooMany].map((code) => {
      const { link, newest } = workbench();
      newest().breaks(code);
      return link.state.kind === 'lost' ? link.state.reason : '';
    });
    expect(reasons).toEqual([
      'the server was stopped',
      'this page could not keep up',
      'the server has its limit of viewers',
    ]);
  });

  it('drops what it cannot understand, tells it, and lives on', () => {
    const { link, newest, heard } = workbench();
    newest().onopen?.();
    newest().says(hello('a'));
    newest().onmessage?.({ data: '{"type":' });
    newest().onmessage?.({ data: new Uint8Array([255, 255, 255, 255, 0]).buffer });
    expect(heard.garbled).toHaveLength(2);
    expect(link.state.kind).toBe('live');
  });

  it('hands over binary frames', () => {
    const { newest, heard } = workbench();
    const header: FrameHeader = {
      bridge: 'sallow',
      kind: 'live',
      layout: 'envelope',
      channels: [{ sensor: 'A1', startMicros: 0, stepMicros: 20_000, count: 1, at: 0 }],
    };
    newest().onmessage?.({ data: encodeFrame(header, Float32Array.of(-1, 1)).buffer });
    expect(heard.frames).toBe(1);
  });

  it('leaves no timer and no socket when it is closed', () => {
    const { link, newest, timers } = workbench();
    newest().onopen?.();
    const socket = newest();
    link.close();
    link.close();
    expect(socket.closed).toBe(true);
    expect(timers.size).toBe(0);
  });
});
