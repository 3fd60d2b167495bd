import type { Span, Structure } from '../contract/bridge.ts';

/**
 * Values of EN 1990:2002/A1:2005 Annex A2 and EN 1991-2:2003 section 6.4 as far as the program uses them. They are
 * recommended values; the national annex and the responsible engineer decide.
 */

/** The frequency up to which deck acceleration counts, and what set it. */
export interface BandEdge {
  upToHz: number;
  /** For a person: `1.5 f1 = 33.0 Hz`. */
  setBy: string;
}

/** The floor of the band rule. */
const BAND_FLOOR_HZ = 30;

/**
 * Upper edge of the band for the deck-acceleration check: the greatest of 30 Hz, 1.5 f1 and f3
 * (EN 1990 A2.4.4.2.1(4)P; f3 is the frequency of the third mode of the member).
 *
 * Where f3 is not defined it is taken as 9 f1, the third bending mode of a uniform simply supported span; without f1
 * only the 30 Hz are left, and `setBy` says so.
 *
 * @param span the member; only its frequencies are used
 * @example bandEdge({ frequenciesHz: { f1: 5.2 } }) // { upToHz: 46.8, setBy: 'f3 taken as 9 f1 = 46.8 Hz' }
 */
export function bandEdge(span: Pick<Span, 'frequenciesHz'>): BandEdge {
  const { f1, f3 } = span.frequenciesHz ?? {};
  const candidates: BandEdge[] = [{ upToHz: BAND_FLOOR_HZ, setBy: '30 Hz' }];
  if (f1 !== undefined) candidates.push(edge('1.5 f1', 1.5 * f1));
  if (f3 !== undefined) candidates.push(edge('f3', f3));
  else if (f1 !== undefined) candidates.push(edge('f3 taken as 9 f1', 9 * f1));
  const highest = candidates.reduce((best, next) => (next.upToHz > best.upToHz ? next : best));
  return f1 === undefined && f3 === undefined
    ? { ...highest, setBy: '30 Hz, as neither f1 nor f3 is defined' }
    : highest;
}

function edge(name: string, hz: number): BandEdge {
  // nine times a decimal fraction must not show as 46.800000000000004
  const upToHz = Number(hz.toPrecision(12));
  return { upToHz, setBy: `${name} = ${upToHz.toFixed(1)} Hz` };
}

/** Range of validity of {@link naturalFrequencyBounds}, m. */
const BOUNDS_LENGTH_M = [4, 100] as const;

/**
 * Usual range of the first natural frequency of a span, EN 1991-2 6.4.4 Figure 6.10.
 *
 * @param lengthM span, 4 … 100 m
 * @returns Hz, or null outside the figure; at 20 m the branch of the shorter spans holds
 * @example naturalFrequencyBounds(20) // { lowerHz: 4, upperHz: 10.0799 }
 */
export function naturalFrequencyBounds(lengthM: number): { lowerHz: number; upperHz: number } | null {
  if (!(lengthM >= BOUNDS_LENGTH_M[0] && lengthM <= BOUNDS_LENGTH_M[1])) return null;
  return {
    lowerHz: lengthM <= 20 ? 80 / lengthM : 23.58 * lengthM ** -0.592,
    upperHz: 94.76 * lengthM ** -0.748,
  };
}

/** Table 6.6: value from 20 m span on, and increase per metre below, %. */
const DAMPING = {
  steel: { base: 0.5, perMetre: 0.125 },
  prestressed: { base: 1.0, perMetre: 0.07 },
  reinforced: { base: 1.5, perMetre: 0.07 },
} as const;

const DAMPING_KIND: Readonly<Record<Structure, keyof typeof DAMPING | null>> = {
  'steel trough': 'steel',
  'steel plate girder': 'steel',
  'steel truss': 'steel',
  'steel box girder': 'steel',
  composite: 'steel',
  'prestressed concrete': 'prestressed',
  'reinforced concrete': 'reinforced',
  'filler beam': 'reinforced',
  'masonry arch': null,
  other: null,
};

/**
 * Lower-bound damping of a span, EN 1991-2 Table 6.6.
 *
 * @returns % of critical, or null for a structure that the table does not know
 * @example lowerBoundDampingPercent('steel trough', 15) // 1.125
 */
export function lowerBoundDampingPercent(structure: Structure, lengthM: number): number | null {
  const kind = DAMPING_KIND[structure];
  if (kind === null) return null;
  const { base, perMetre } = DAMPING[kind];
  return base + perMetre * Math.max(0, 20 - lengthM);
}
