/** The program's places and the addresses they live at. */
export type Route =
  | { place: 'network' }
  | { place: 'live'; bridge: string }
  | { place: 'passages'; bridge: string }
  | { place: 'passage'; passage: string }
  | { place: 'alarms'; alarm: string | null }
  | { place: 'bridges'; bridge: string }
  /** A place of a bridge without saying of which. */
  | { place: 'choice'; of: PlaceOfBridge }
  | { place: 'nowhere'; path: string };

export type Place = Route['place'];
export type PlaceOfBridge = 'live' | 'passages' | 'bridges';

/** Filters of a place; `undefined` and empty leave the address. */
export type Query = Readonly<Record<string, string | number | undefined>>;

/** @example parsePath('/live/ottermere') // { place: 'live', bridge: 'ottermere' } */
export function parsePath(path: string): Route {
  const parts = decoded(path);
  const nowhere: Route = { place: 'nowhere', path };
  if (parts === null) return nowhere;
  const [place, id, ...rest] = parts;
  if (rest.length > 0) return nowhere;
  if (place === undefined) return { place: 'network' };
  if (place === 'alarms') return { place, alarm: id ?? null };
  if (place === 'live' || place === 'passages' || place === 'bridges') {
    return id === undefined ? { place: 'choice', of: place } : { place, bridge: id };
  }
  if (id === undefined) return nowhere;
  if (place === 'passage') return { place, passage: id };
  return nowhere;
}

/** @example hrefOf({ place: 'passages', bridge: 'sallow' }, { minPeak: 2.2 }) // '/passages/sallow?minPeak=2.2' */
export function hrefOf(route: Route, query: Query = {}): string {
  const search = new URLSearchParams();
  for (const [name, value] of Object.entries(query)) {
    if (value !== undefined && value !== '') search.set(name, String(value));
  }
  const text = search.toString();
  return pathOf(route) + (text === '' ? '' : `?${text}`);
}

function pathOf(route: Route): string {
  switch (route.place) {
    case 'network':
      return '/';
    case 'alarms':
      return route.alarm === null ? '/alarms' : `/alarms/${encodeURIComponent(route.alarm)}`;
    case 'passage':
      return `/passage/${encodeURIComponent(route.passage)}`;
    case 'nowhere':
      return route.path;
    case 'choice':
      return `/${route.of}`;
    default:
      return `/${route.place}/${encodeURIComponent(route.bridge)}`;
  }
}

/** The bridge an address speaks of. A passage's id begins with its bridge and ends in a time name of three parts. */
export function bridgeOf(route: Route): string | null {
  if ('bridge' in route) return route.bridge;
  if (route.place === 'passage') return /^(.+)-\d{8}-\d{6}-\d$/.exec(route.passage)?.[1] ?? null;
  return null;
}

function decoded(path: string): string[] | null {
  try {
    return path
      .split('/')
      .filter((part) => part !== '')
      .map(decodeURIComponent);
  } catch {
    return null;
  }
}
