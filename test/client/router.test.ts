import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { bridgeOf, hrefOf, parsePath, type Route } from '../../client/router.ts';

describe('an address', () => {
  it('names each place of the program', () => {
    expect(parsePath('/')).toEqual({ place: 'network' });
    expect(parsePath('/live/ottermere')).toEqual({ place: 'live', bridge: 'ottermere' });
    expect(parsePath('/passages/sallow')).toEqual({ place: 'passages', bridge: 'sallow' });
    expect(parsePath('/passage/sallow-20261201-051233-2')).toEqual({
      place: 'passage',
      passage: 'sallow-20261201-051233-2',
    });
    expect(parsePath('/alarms')).toEqual({ place: 'alarms', alarm: null });
    expect(parsePath('/alarms/a1')).toEqual({ place: 'alarms', alarm: 'a1' });
    expect(parsePath('/bridges/fennick')).toEqual({ place: 'bridges', bridge: 'fennick' });
  });

  it('of a bridge’s place without a bridge leads to a choice', () => {
    for (const of of ['live', 'passages', 'bridges'] as const) {
      expect(parsePath(`/${of}`)).toEqual({ place: 'choice', of });
      expect(parsePath(`/${of}/`)).toEqual({ place: 'choice', of });
      expect(hrefOf({ place: 'choice', of })).toBe(`/${of}`);
    }
  });

  it('that names none is told, with what was asked for', () => {
    for (const path of ['/lives', '/nothing/x', '/live/a/b', '/passage', '/live/%E0%A4%A']) {
      expect(parsePath(path)).toEqual({ place: 'nowhere', path });
    }
  });

  it('bears a slash at its end', () => {
    expect(parsePath('/live/ottermere/')).toEqual({ place: 'live', bridge: 'ottermere' });
  });

  it('comes back from the route it names, whatever the id', () => {
    const id = fc.string({ minLength: 1, maxLength: 40, unit: 'grapheme' }).filter((text) => text.isWellFormed());
    const route = fc.oneof(
      id.map((bridge): Route => ({ place: 'live', bridge })),
      id.map((passage): Route => ({ place: 'passage', passage })),
      id.map((alarm): Route => ({ place: 'alarms', alarm })),
    );
    fc.assert(
      fc.property(route, (each) => {
        expect(parsePath(hrefOf(each))).toEqual(each);
      }),
    );
  });

  it('carries filters and leaves empty ones out', () => {
    const href = hrefOf(
      { place: 'passages', bridge: 'sallow' },
      { minPeak: 2.2, direction: undefined, quality: '', order: 'peak' },
    );
    expect(href).toBe('/passages/sallow?minPeak=2.2&order=peak');
  });
});

describe('the bridge of an address', () => {
  it('is read from a passage id, hyphens in its own id included', () => {
    expect(bridgeOf({ place: 'passage', passage: 'long-name-20261201-051233-2' })).toBe('long-name');
  });

  it('is none where the place is for all', () => {
    expect([bridgeOf({ place: 'network' }), bridgeOf({ place: 'alarms', alarm: null })]).toEqual([null, null]);
    expect(bridgeOf({ place: 'passage', passage: 'odd' })).toBeNull();
  });
});
