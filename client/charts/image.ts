import { readInk } from './ink.ts';

/** What stands above a picture that leaves the page, so that it still says what it shows. */
export interface Caption {
  title: string;
  finding: string;
}

const SCALE = 2;
const MARGIN = 16;
const HEAD = 44;
const FOOT = 18;

/** Where a picture comes from: the page, its address with the bridge or the passage in it, and when it was saved. */
const origin = (): string =>
  `${document.title}, ${decodeURI(location.pathname)}; saved ${new Date().toISOString().slice(0, 19).replace('T', ' ')} UTC`;

/** A canvas with its caption, and at its foot where it comes from, as PNG. */
export async function pngOfCanvas(source: HTMLCanvasElement, caption: Caption): Promise<Blob> {
  const { width, height } = source.getBoundingClientRect();
  return compose(source, source, width, height, caption);
}

/** A drawing with its caption as PNG: the SVG is copied with its computed look and type, then painted. */
export async function pngOfSvg(svg: SVGSVGElement, caption: Caption): Promise<Blob> {
  const { width, height } = svg.getBoundingClientRect();
  const copy = withLook(svg);
  copy.setAttribute('xmlns', 'http://www.w3.org/2000/svg');
  copy.setAttribute('width', String(width * SCALE));
  copy.setAttribute('height', String(height * SCALE));
  if (!copy.hasAttribute('viewBox')) copy.setAttribute('viewBox', `0 0 ${width} ${height}`);
  const style = document.createElementNS('http://www.w3.org/2000/svg', 'style');
  style.textContent = await fontFaces();
  copy.prepend(style);
  const image = new Image();
  image.src = `data:image/svg+xml;charset=utf-8,${encodeURIComponent(new XMLSerializer().serializeToString(copy))}`;
  await image.decode();
  return compose(image, svg, width, height, caption);
}

async function compose(
  picture: CanvasImageSource,
  themed: Element,
  width: number,
  height: number,
  { title, finding }: Caption,
): Promise<Blob> {
  const ink = readInk(themed);
  const canvas = document.createElement('canvas');
  canvas.width = Math.round((width + 2 * MARGIN) * SCALE);
  canvas.height = Math.round((height + 2 * MARGIN + HEAD + FOOT) * SCALE);
  const context = canvas.getContext('2d');
  if (!context) throw new Error('this browser gives no canvas to draw the picture on');
  context.scale(SCALE, SCALE);
  context.fillStyle = ink.paper;
  context.fillRect(0, 0, canvas.width, canvas.height);
  context.fillStyle = ink.ink;
  context.font = `600 16px ${getComputedStyle(document.body).fontFamily}`;
  context.fillText(title, MARGIN, MARGIN + 14);
  context.fillStyle = ink.ink2;
  context.font = `13px ${ink.narrow}`;
  context.fillText(finding, MARGIN, MARGIN + 32, width);
  context.drawImage(picture, MARGIN, MARGIN + HEAD, width, height);
  context.font = `11px ${ink.narrow}`;
  context.fillText(origin(), MARGIN, MARGIN + HEAD + height + FOOT, width);
  return new Promise((resolve, reject) => {
    canvas.toBlob((blob) => (blob ? resolve(blob) : reject(new Error('the picture could not be saved'))), 'image/png');
  });
}

const LOOK = [
  'fill',
  'stroke',
  'stroke-width',
  'stroke-dasharray',
  'stroke-linejoin',
  'stroke-linecap',
  'opacity',
  'fill-opacity',
  'font-family',
  'font-size',
  'font-weight',
  'text-anchor',
  'paint-order',
] as const;

/** A copy whose elements carry their computed look as attributes, and without what is hidden. */
function withLook(svg: SVGSVGElement): SVGSVGElement {
  const copy = svg.cloneNode(true) as SVGSVGElement;
  const originals = [svg, ...svg.querySelectorAll('*')];
  const copies = [copy, ...copy.querySelectorAll('*')];
  const hidden: Element[] = [];
  originals.forEach((original, i) => {
    const style = getComputedStyle(original);
    const target = copies[i]!;
    if (style.display === 'none' || style.visibility === 'hidden') hidden.push(target);
    for (const property of LOOK) target.setAttribute(property, style.getPropertyValue(property));
    target.removeAttribute('class');
  });
  for (const element of hidden) if (element !== copy) element.remove();
  return copy;
}

/** The page's own type as data, since an SVG used as an image fetches nothing. */
async function fontFaces(): Promise<string> {
  const rules = [...document.styleSheets]
    .flatMap((sheet) => [...sheet.cssRules])
    .filter((rule): rule is CSSFontFaceRule => rule instanceof CSSFontFaceRule && isNeeded(rule));
  const faces = await Promise.all(
    rules.map(async (rule) => {
      const url = /url\("?([^")]+)"?\)/.exec(rule.style.getPropertyValue('src'))?.[1];
      if (!url) return '';
      const data = url.startsWith('data:')
        ? url
        : await asDataUrl(new URL(url, rule.parentStyleSheet?.href ?? location.href).href);
      const { style } = rule;
      return `@font-face{font-family:${style.getPropertyValue('font-family')};font-weight:${style.getPropertyValue('font-weight')};src:url(${data})}`;
    }),
  );
  return faces.join('');
}

const isNeeded = (rule: CSSFontFaceRule): boolean => {
  const range = rule.style.getPropertyValue('unicode-range');
  const latin = range === '' || /U\+0?0?00-0?0?FF|U\+0-FF/i.test(range);
  return latin && rule.style.getPropertyValue('font-family').includes('Condensed');
};

async function asDataUrl(url: string): Promise<string> {
  const blob = await (await fetch(url)).blob();
  return new Promise((resolve, reject) => {
    const reader = new FileReader();
    reader.onload = () => resolve(reader.result as string);
    reader.onerror = () => reject(new Error(`the type at ${url} could not be read`));
    reader.readAsDataURL(blob);
  });
}
