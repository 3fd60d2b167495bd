import type { Micros } from '#core/contract/time.ts';
import type { SectionLayout } from './section-layout.ts';
import type { DrawnAxle, LiveTrain } from './train.ts';
import { bogiesOf, vehiclesOf } from './vehicles.ts';

/** What the drawing says of the train. */
export interface TrainReport {
  axles: number;
  onBridge: number;
  speedMs: number | null;
  passage: string | null;
}

const SVG = 'http://www.w3.org/2000/svg';
const WHEEL_M = 0.45;
const ROOF_M = -3.95;
const FLOOR_M = -0.98;
/** A reader who wants less motion sees the train in steps. */
const CALM_STEP_MS = 500;

/**
 * Draws a train into a group, at each frame while there is one in sight and not at all otherwise. Axles on the bridge
 * are filled; bogies are joined; outlines only where the axle pattern tells them.
 */
export function mountTrain(
  group: SVGGElement,
  layout: SectionLayout,
  train: LiveTrain,
  now: () => Micros,
  report: (report: TrainReport) => void,
): { wake: () => void; destroy: () => void } {
  const outlines = element(group, 'path', 'n k2 w25 chain2');
  const frames = element(group, 'path', 'n k2 w35');
  const off = element(group, 'path', 'fp k2 w35');
  const offHubs = element(group, 'path', 'fk2');
  const on = element(group, 'path', 'fk k w35');
  const onHubs = element(group, 'path', 'fp');
  const calm = matchMedia('(prefers-reduced-motion: reduce)');
  let handle = 0;
  let timer: ReturnType<typeof setTimeout> | null = null;
  let said = '';

  const tell = (next: TrainReport): void => {
    const words = `${next.axles} ${next.onBridge} ${next.speedMs?.toFixed(1)} ${next.passage}`;
    if (words === said) return;
    said = words;
    report(next);
  };

  const draw = (): void => {
    handle = 0;
    const drawn = train.axlesAt(now());
    const shown = drawTrain(drawn);
    const waiting = now() - train.lastMicros < 3_000_000;
    const onBridge = drawn.filter(({ alongM }) => alongM >= 0 && alongM <= layout.lengthM).length;
    const entered = train.speedMs === null ? drawn.length : drawn.filter((axle) => hasEntered(axle)).length;
    if (shown > 0 || waiting) {
      tell({ axles: entered, onBridge, speedMs: train.speedMs, passage: train.passage });
      next();
    } else {
      tell({ axles: 0, onBridge: 0, speedMs: null, passage: null });
    }
  };

  const hasEntered = ({ alongM }: DrawnAxle): boolean =>
    (train.speedMs ?? 0) > 0 ? alongM >= 0 : alongM <= layout.lengthM;

  const next = (): void => {
    if (handle !== 0 || timer !== null) return;
    if (calm.matches) {
      timer = setTimeout(() => {
        timer = null;
        draw();
      }, CALM_STEP_MS);
    } else {
      handle = requestAnimationFrame(draw);
    }
  };

  /** @returns how many axles are in sight */
  const drawTrain = (drawn: readonly DrawnAxle[]): number => {
    const { x, y, pxPerM } = layout;
    const r = Math.max(2.2, WHEEL_M * pxPerM);
    const axleY = y(0) - r - 0.5;
    const sight = drawn.filter(({ alongM }) => alongM > layout.fromM - 1 && alongM < layout.toM + 1);
    const wheels = (bridge: boolean, radius: number): string =>
      sight
        .filter(({ alongM }) => bridge === (alongM >= 0 && alongM <= layout.lengthM))
        .map(({ alongM }) => disc(x(alongM), axleY, radius))
        .join('');
    off.setAttribute('d', wheels(false, r));
    offHubs.setAttribute('d', wheels(false, Math.min(1.3, r / 3)));
    on.setAttribute('d', wheels(true, r));
    onHubs.setAttribute('d', r > 3 ? wheels(true, Math.max(1.2, r * 0.18)) : '');
    drawBodies(drawn, axleY);
    return sight.length;
  };

  const drawBodies = (drawn: readonly DrawnAxle[], axleY: number): void => {
    const speed = train.speedMs;
    if (speed === null || drawn.length === 0) {
      outlines.setAttribute('d', '');
      frames.setAttribute('d', '');
      return;
    }
    const { x, y, fromM, toM } = layout;
    const ahead = Math.sign(speed);
    const first = drawn[0]!.alongM;
    const behind = drawn.map(({ alongM }) => Math.max(0, (first - alongM) * ahead));
    const bogies = bogiesOf(behind);
    const at = (m: number): number => x(first - ahead * m);
    const seen = (m: number): boolean => first - ahead * m > fromM - 30 && first - ahead * m < toM + 30;
    frames.setAttribute(
      'd',
      bogies
        .filter(({ first: a, last: b }) => b > a && seen(behind[a]!))
        .map(({ first: a, last: b }) => `M${at(behind[a]!).toFixed(1)} ${axleY - 1}H${at(behind[b]!).toFixed(1)}`)
        .join(''),
    );
    const roof = y(ROOF_M);
    const foot = Math.min(y(FLOOR_M), axleY - 6);
    outlines.setAttribute(
      'd',
      vehiclesOf(behind, bogies)
        .filter(({ fromM: a, toM: b }) => seen(a) || seen(b))
        .map(({ fromM: a, toM: b }) => body(Math.min(at(a), at(b)), Math.max(at(a), at(b)), roof, foot))
        .join(''),
    );
  };

  return {
    wake: next,
    destroy() {
      cancelAnimationFrame(handle);
      if (timer !== null) clearTimeout(timer);
      group.replaceChildren();
    },
  };
}

function element(group: SVGGElement, name: 'path', pens: string): SVGPathElement {
  const made = document.createElementNS(SVG, name);
  made.setAttribute('class', pens);
  group.append(made);
  return made;
}

const disc = (x: number, y: number, r: number): string =>
  `M${(x - r).toFixed(1)} ${y.toFixed(1)}a${r.toFixed(1)} ${r.toFixed(1)} 0 1 0 ${(2 * r).toFixed(1)} 0a${r.toFixed(1)} ${r.toFixed(1)} 0 1 0 ${(-2 * r).toFixed(1)} 0z`;

/** Outline of a vehicle with rounded roof edges. */
function body(left: number, right: number, roof: number, foot: number): string {
  const r = Math.min(6, (right - left) / 4);
  const [a, b] = [left.toFixed(1), right.toFixed(1)];
  return `M${a} ${foot}V${roof + r}Q${a} ${roof} ${left + r} ${roof}H${right - r}Q${b} ${roof} ${b} ${roof + r}V${foot}Z`;
}
