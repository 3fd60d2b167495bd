import { seededStones } from './stones.ts';
import { box, circle, line, polygon, type Figure, type Point } from './pen.ts';
import { LEVEL, type SectionLayout, type SpanLevels } from './section-layout.ts';

/**
 * The long section as figures, back to front: fill and abutments, girders beyond the cut, ballast, sleepers, cut floor
 * and cross-beams, rail, bearings. `hatch` and `earth` name the pattern a figure is filled with, by its pen.
 */
export function drawSection(layout: SectionLayout): Figure[] {
  const { spans } = layout;
  return [
    ...approaches(layout),
    ...supports(layout).flatMap((support) => concrete(support)),
    ...spans.flatMap((span) => girder(layout, span)),
    ...ballast(layout),
    ...spans.flatMap((span) => floor(layout, span)),
    ...sleepers(layout),
    ...rail(layout),
    ...spans.flatMap((span) => bearings(layout, span)),
  ];
}

/** Half the gap at the end of a girder, m: how far it reaches beyond its bearing. */
const OVERHANG = 0.32;
const PIER_BEARING = 0.45;

/** Bearings of neighbouring spans stand side by side on the pier. */
function bearingAt(layout: SectionLayout, { span }: SpanLevels, end: boolean): number {
  const at = span.startM + (end ? span.lengthM : 0);
  const shared = end ? at < layout.lengthM - 0.01 : at > 0.01;
  return shared ? at + (end ? -PIER_BEARING : PIER_BEARING) : at;
}

function edges(layout: SectionLayout, { span }: SpanLevels): [left: number, right: number] {
  const a = span.startM;
  const b = a + span.lengthM;
  return [layout.x(a + (a > 0.01 ? 0.04 : -OVERHANG)), layout.x(b + (b < layout.lengthM - 0.01 ? -0.04 : OVERHANG))];
}

function approaches({ x, y, fine, fromM, toM, lengthM }: SectionLayout): Figure[] {
  const top = y(LEVEL.ballastFoot + 0.06);
  const left = x(-0.95);
  const right = x(lengthM + 0.95);
  const figures: Figure[] = [{ d: line(x(fromM), top, left, top) + line(right, top, x(toM), top), pen: 'n k w25' }];
  if (fine)
    figures.push({ d: box(x(fromM), top, left - x(fromM), 9) + box(right, top, x(toM) - right, 9), pen: 'earth' });
  return figures;
}

function concrete(outline: Point[]): Figure[] {
  return [
    { d: polygon(outline), pen: 'fp k w50 rj' },
    { d: polygon(outline), pen: 'hatch' },
  ];
}

/** Abutments at both ends and a pier where spans meet. */
function supports(layout: SectionLayout): Point[][] {
  const { x, y, spans, floor, lengthM } = layout;
  const first = spans[0]!;
  const last = spans[spans.length - 1]!;
  const abutment = (at: number, side: 1 | -1, soffitM: number): Point[] => {
    const seat = y(soffitM) + seatDepth(layout);
    const shoulder = y(LEVEL.ballastFoot + 0.06);
    const px = (m: number): number => x(at + side * m);
    return [
      [px(0.55), seat],
      [px(-0.38), seat],
      [px(-0.38), shoulder],
      [px(-0.95), shoulder],
      [px(-0.95), shoulder + (seat - shoulder) * 0.45],
      [px(-1.7), floor - 2],
      [px(0.55), floor - 2],
    ];
  };
  const pier = (at: number, soffitM: number): Point[] => {
    const seat = y(soffitM) + seatDepth(layout);
    const cap = Math.max(5, 0.35 * layout.pxPerM);
    return [
      [x(at - 0.95), seat],
      [x(at + 0.95), seat],
      [x(at + 0.95), seat + cap],
      [x(at + 0.7), seat + cap],
      [x(at + 0.8), floor - 2],
      [x(at - 0.8), floor - 2],
      [x(at - 0.7), seat + cap],
      [x(at - 0.95), seat + cap],
    ];
  };
  const piers = spans.slice(0, -1).map((span, i) => {
    const next = spans[i + 1]!;
    return pier((span.span.startM + span.span.lengthM + next.span.startM) / 2, Math.max(span.soffitM, next.soffitM));
  });
  return [abutment(0, 1, first.soffitM), ...piers, abutment(lengthM, -1, last.soffitM)];
}

/** Height of a bearing, px. */
const seatDepth = ({ pxPerM }: SectionLayout): number => Math.max(6, 0.28 * pxPerM);

function girder(layout: SectionLayout, levels: SpanLevels): Figure[] {
  switch (levels.span.structure) {
    case 'steel truss':
      return truss(layout, levels);
    case 'masonry arch':
      return arch(layout, levels);
    case 'prestressed concrete':
    case 'reinforced concrete':
    case 'filler beam':
      return slab(layout, levels);
    default:
      return webbed(layout, levels);
  }
}

/** A solid web seen beyond the cut, with its stiffeners and flanges. */
function webbed(layout: SectionLayout, { span, topM, soffitM, floorM }: SpanLevels): Figure[] {
  const { x, y, fine } = layout;
  const [left, right] = edges(layout, { span, topM, soffitM, floorM });
  const top = y(topM);
  const foot = y(soffitM);
  const figures: Figure[] = [{ d: box(left, top, right - left, foot - top), pen: 'ft k w35' }];
  const panels = Math.max(6, Math.round(span.lengthM / 1.5));
  let stiffeners = '';
  for (let i = 0; i <= panels; i++) {
    const at = x(span.startM + (i * span.lengthM) / panels);
    stiffeners += line(at, y(floorM), at, foot - (fine ? 3 : 0));
  }
  if (span.structure !== 'steel box girder') figures.push({ d: stiffeners, pen: 'n k3 w18' });
  if (fine) {
    figures.push({ d: line(left, top + 2.5, right, top + 2.5), pen: 'n k w18' });
    figures.push({ d: line(left, foot - 3, right, foot - 3), pen: 'n k w25' });
  }
  if (span.structure === 'composite') {
    figures.push({ d: box(left, y(floorM), right - left, Math.max(4, 0.25 * layout.pxPerM)), pen: 'fp k w35' });
    figures.push({ d: box(left, y(floorM), right - left, Math.max(4, 0.25 * layout.pxPerM)), pen: 'hatch' });
  }
  figures.push({ d: box(left, foot - 1.6, right - left, 3.2), pen: 'fk' });
  return figures;
}

/** Warren truss with posts below the deck; its diagonals fall towards the middle, where they are in tension. */
function truss(layout: SectionLayout, levels: SpanLevels): Figure[] {
  const { x, y } = layout;
  const { span, topM, soffitM } = levels;
  const [left, right] = edges(layout, levels);
  const panels = 2 * Math.max(2, Math.round(span.lengthM / (soffitM - topM) / 2));
  const top = y(topM);
  const foot = y(soffitM);
  let posts = '';
  let diagonals = '';
  for (let i = 0; i <= panels; i++) {
    const at = x(span.startM + (i * span.lengthM) / panels);
    const clipped = Math.min(Math.max(at, left), right);
    posts += line(clipped, top, clipped, foot);
    if (i === panels) continue;
    const next = Math.min(x(span.startM + ((i + 1) * span.lengthM) / panels), right);
    diagonals += i % 2 === 0 ? line(clipped, foot, next, top) : line(clipped, top, next, foot);
  }
  return [
    { d: posts, pen: 'n k w25' },
    { d: diagonals, pen: 'n k w50' },
    { d: box(left, top - 2, right - left, 4), pen: 'fp k w35' },
    { d: box(left, foot - 2, right - left, 4), pen: 'fp k w50' },
  ];
}

/** A concrete deck, cut along the centre line. */
function slab(layout: SectionLayout, levels: SpanLevels): Figure[] {
  const [left, right] = edges(layout, levels);
  const top = layout.y(levels.floorM);
  const foot = layout.y(levels.soffitM);
  const figures = concrete([
    [left, top],
    [right, top],
    [right, foot],
    [left, foot],
  ]);
  if (levels.span.structure === 'filler beam') {
    figures.push({ d: line(left, top + (foot - top) * 0.25, right, top + (foot - top) * 0.25), pen: 'n k dash w25' });
  }
  return figures;
}

/** Segmental arch: ring cut, spandrel fill above it. */
function arch(layout: SectionLayout, { span, floorM, soffitM }: SpanLevels): Figure[] {
  const { x, y } = layout;
  const half = span.lengthM / 2;
  const rise = soffitM - floorM - 0.55;
  const radius = (half * half + rise * rise) / (2 * rise);
  const ring = (r: number, from: number, to: number): Point[] =>
    Array.from({ length: 41 }, (_, i) => {
      const angle = from + ((to - from) * i) / 40;
      return [x(span.startM + half + r * Math.sin(angle)), y(soffitM - rise + radius - r * Math.cos(angle))];
    });
  const open = Math.asin(Math.min(1, half / radius));
  const inner = ring(radius, -open, open);
  const outer = ring(radius + 0.5, open, -open);
  const left = x(span.startM);
  const right = x(span.startM + span.lengthM);
  return [
    { d: polygon([[left, y(floorM)], [right, y(floorM)], ...outer.toSorted((a, b) => b[0] - a[0])]), pen: 'ft k3 w18' },
    ...concrete([...inner, ...outer]),
  ];
}

function ballast({ x, y, fine, spans, fromM, toM, pxPerM }: SectionLayout): Figure[] {
  const top = y(LEVEL.ballastTop);
  const foot = y(LEVEL.ballastFoot);
  const figures: Figure[] = [];
  for (const [a, b] of ballasted(spans, fromM, toM)) {
    figures.push({ d: box(x(a), top, x(b) - x(a), foot - top), pen: 'fp' });
    if (fine) figures.push({ d: seededStones(x(a), x(b), top + 2, foot - 1, pxPerM), pen: 'n k3 stone' });
    else figures.push({ d: box(x(a), top, x(b) - x(a), foot - top), pen: 'hatch faint' });
    figures.push({ d: line(x(a), top, x(b), top), pen: 'n k3 w18' });
  }
  return figures;
}

/** Stretches with ballast: the approaches, and the spans that carry some. */
function ballasted(spans: readonly SpanLevels[], fromM: number, toM: number): [number, number][] {
  const bare = spans.filter(({ span }) => span.track !== 'ballasted');
  const stretches: [number, number][] = [];
  let at = fromM;
  for (const { span } of bare) {
    if (span.startM > at) stretches.push([at, span.startM - OVERHANG]);
    at = span.startM + span.lengthM + OVERHANG;
  }
  if (at < toM) stretches.push([at, toM]);
  return stretches;
}

/** What carries the track, cut: plate and cross-beams. */
function floor(layout: SectionLayout, levels: SpanLevels): Figure[] {
  const { x, y, fine, pxPerM } = layout;
  const { span, floorM, soffitM } = levels;
  if (!span.structure.startsWith('steel') && span.structure !== 'other') return [];
  const [left, right] = edges(layout, levels);
  const plate = Math.max(2.2, 0.05 * pxPerM);
  const figures: Figure[] = [{ d: box(left, y(floorM), right - left, plate), pen: 'fk' }];
  if (!fine || span.structure === 'steel box girder') return figures;
  const beams = span.structure === 'steel truss' ? 0 : Math.max(6, Math.round(span.lengthM / 1.5));
  const foot = y(floorM + (soffitM - floorM) * 0.62);
  let webs = '';
  for (let i = 0; i <= beams && beams > 0; i++) {
    const at = x(span.startM + (i * span.lengthM) / beams);
    webs += line(at, y(floorM) + 1, at, foot) + line(at - 3.6, foot, at + 3.6, foot);
  }
  figures.push({ d: webs, pen: 'n k w50' });
  return figures;
}

/** At 0.6 m, as usual on main lines. */
const SLEEPER_SPACING = 0.6;

function sleepers({ x, y, fine, fromM, toM, pxPerM }: SectionLayout): Figure[] {
  if (pxPerM < 5) return [];
  let d = '';
  const height = (LEVEL.sleeperFoot - LEVEL.sleeperTop) * pxPerM;
  for (let k = Math.floor(fromM / SLEEPER_SPACING); k * SLEEPER_SPACING < toM; k++) {
    d += box(x(k * SLEEPER_SPACING + 0.17), y(LEVEL.sleeperTop), 0.26 * pxPerM, height);
  }
  return [{ d, pen: `fp k ${fine ? 'w25' : 'w18'}` }];
}

function rail({ x, y, fine, fromM, toM, pxPerM }: SectionLayout): Figure[] {
  const width = x(toM) - x(fromM);
  const figures: Figure[] = [
    { d: box(x(fromM) - 4, y(0), width + 8, Math.max(2.5, LEVEL.rail * pxPerM)), pen: `fp k ${fine ? 'w35' : 'w25'}` },
  ];
  if (fine) figures.push({ d: line(x(fromM), y(0.05), x(toM), y(0.05)), pen: 'n k3 w18' });
  return figures;
}

/** Fixed at the end of lower chainage, rollers at the other. */
function bearings(layout: SectionLayout, levels: SpanLevels): Figure[] {
  if (levels.span.structure === 'masonry arch') return [];
  const top = layout.y(levels.soffitM) + 1.6;
  const foot = layout.y(levels.soffitM) + seatDepth(layout);
  const fixed = layout.x(bearingAt(layout, levels, false));
  const moving = layout.x(bearingAt(layout, levels, true));
  const wide = layout.fine ? 8 : 4;
  const rocker: Figure = {
    d: polygon([
      [fixed, top],
      [fixed - wide, foot],
      [fixed + wide, foot],
    ]),
    pen: `fp k ${layout.fine ? 'w35' : 'w25'}`,
  };
  const r = Math.max(1.6, (foot - top) / 2 - 2);
  const middle = (top + foot) / 2;
  const gap = layout.fine ? 4.5 : 2.4;
  return [
    rocker,
    { d: box(fixed - wide - 2, foot - 2.5, 2 * wide + 4, 3), pen: 'fk' },
    { d: box(moving - wide - 2, top - 1, 2 * wide + 4, 2.5), pen: 'fk' },
    { d: circle(moving - gap, middle, r) + circle(moving + gap, middle, r), pen: 'fp k w25' },
    { d: box(moving - wide - 2, foot - 2.5, 2 * wide + 4, 3), pen: 'fk' },
  ];
}
