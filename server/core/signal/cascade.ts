import { SECTION_WIDTH, type Sections } from './butterworth.ts';

/** A running filter: its sections and two numbers of memory for each. Plain data: it can be cloned and stored. */
export interface Cascade {
  sections: Sections;
  memory: Float64Array;
}

/**
 * Far below anything measured, far above the smallest normal number. Added to the input so that the memory of a
 * filter never decays into subnormal numbers, which many processors handle a hundred times more slowly. Inputs
 * larger than 1e-84 are not changed by a bit.
 */
const FAINT = 1e-100;

/** A filter at rest, as if it had seen zeros for ever. */
export function createCascade(sections: Sections): Cascade {
  if (sections.length === 0 || sections.length % SECTION_WIDTH !== 0) {
    throw new RangeError(`sections come in rows of ${SECTION_WIDTH} numbers, at least one; got ${sections.length}`);
  }
  return { sections: sections.slice(), memory: new Float64Array((2 * sections.length) / SECTION_WIDTH) };
}

/**
 * Filters `input[from..to)` into `output[from..to)` and moves the memory on: direct form II transposed, one sample
 * after the other, so that any split of a signal into calls gives the same bits.
 *
 * @param cascade changed: its memory
 * @param input samples; may be the same array as `output`
 * @param output as long as `to` at least
 * @param from first index
 * @param to one past the last index
 * @example
 * const cascade = createCascade(lowpass(2, 20, 200));
 * const y = new Float64Array(3);
 * filterInto(cascade, Float64Array.of(1, 0, 0), y, 0, 3); // y[1] = 0.21201061062684184
 */
export function filterInto(
  cascade: Cascade,
  input: Float64Array,
  output: Float64Array,
  from: number,
  to: number,
): void {
  const { sections, memory } = cascade;
  const count = memory.length / 2;
  let source = input;
  let k = 0;
  let faint = FAINT;
  for (; k + 4 <= count; k += 4) {
    filterFour(sections, memory, k, source, output, from, to, faint);
    source = output;
    faint = 0;
  }
  for (; k + 2 <= count; k += 2) {
    filterPair(sections, memory, k, source, output, from, to, faint);
    source = output;
    faint = 0;
  }
  if (k < count) filterOne(sections, memory, k, source, output, from, to, faint);
}

/**
 * Sets the memory to what a constant input for ever would have left, so that a record that begins away from zero
 * has no transient.
 *
 * @example
 * const cascade = createCascade(lowpass(4, 30, 500));
 * settleAt(cascade, 9.81); // a constant 9.81 now passes through as 9.81 from the first sample
 */
export function settleAt(cascade: Cascade, value: number): void {
  const { sections, memory } = cascade;
  let x = value;
  for (let k = 0; 2 * k < memory.length; k++) {
    const [b0, b1, b2, a1, a2] = row(sections, k);
    const y = (x * (b0 + b1 + b2)) / (1 + a1 + a2);
    const second = b2 * x - a2 * y;
    memory[2 * k + 1] = second;
    memory[2 * k] = b1 * x - a1 * y + second;
    x = y;
  }
}

/** One section. Sums are ordered so that as little as possible waits for y, which the next sample needs. */
function filterOne(
  sections: Sections,
  memory: Float64Array,
  k: number,
  input: Float64Array,
  output: Float64Array,
  from: number,
  to: number,
  faint: number,
): void {
  const [b0, b1, b2, a1, a2] = row(sections, k);
  let s1 = memory[2 * k]!;
  let s2 = memory[2 * k + 1]!;
  for (let i = from; i < to; i++) {
    const x = input[i]! + faint;
    const y = b0 * x + s1;
    s1 = b1 * x + s2 - a1 * y;
    s2 = b2 * x - a2 * y;
    output[i] = y;
  }
  memory[2 * k] = s1;
  memory[2 * k + 1] = s2;
}

/** Two sections at once: the second works on a sample while the first works on the next. */
function filterPair(
  sections: Sections,
  memory: Float64Array,
  k: number,
  input: Float64Array,
  output: Float64Array,
  from: number,
  to: number,
  faint: number,
): void {
  const [b0, b1, b2, a1, a2] = row(sections, k);
  const [d0, d1, d2, c1, c2] = row(sections, k + 1);
  let s1 = memory[2 * k]!;
  let s2 = memory[2 * k + 1]!;
  let t1 = memory[2 * k + 2]!;
  let t2 = memory[2 * k + 3]!;
  for (let i = from; i < to; i++) {
    const x = input[i]! + faint;
    const y = b0 * x + s1;
    s1 = b1 * x + s2 - a1 * y;
    s2 = b2 * x - a2 * y;
    const z = d0 * y + t1;
    t1 = d1 * y + t2 - c1 * z;
    t2 = d2 * y - c2 * z;
    output[i] = z;
  }
  memory[2 * k] = s1;
  memory[2 * k + 1] = s2;
  memory[2 * k + 2] = t1;
  memory[2 * k + 3] = t2;
}

/** Four sections at once, as in `filterPair`. */
function filterFour(
  sections: Sections,
  memory: Float64Array,
  k: number,
  input: Float64Array,
  output: Float64Array,
  from: number,
  to: number,
  faint: number,
): void {
  const [p0, p1, p2, p3, p4] = row(sections, k);
  const [q0, q1, q2, q3, q4] = row(sections, k + 1);
  const [r0, r1, r2, r3, r4] = row(sections, k + 2);
  const [s0, s1, s2, s3, s4] = row(sections, k + 3);
  const at = 2 * k;
  let p = memory[at]!;
  let pp = memory[at + 1]!;
  let q = memory[at + 2]!;
  let qq = memory[at + 3]!;
  let r = memory[at + 4]!;
  let rr = memory[at + 5]!;
  let s = memory[at + 6]!;
  let ss = memory[at + 7]!;
  for (let i = from; i < to; i++) {
    const x = input[i]! + faint;
    const y = p0 * x + p;
    p = p1 * x + pp - p3 * y;
    pp = p2 * x - p4 * y;
    const z = q0 * y + q;
    q = q1 * y + qq - q3 * z;
    qq = q2 * y - q4 * z;
    const u = r0 * z + r;
    r = r1 * z + rr - r3 * u;
    rr = r2 * z - r4 * u;
    const v = s0 * u + s;
    s = s1 * u + ss - s3 * v;
    ss = s2 * u - s4 * v;
    output[i] = v;
  }
  memory[at] = p;
  memory[at + 1] = pp;
  memory[at + 2] = q;
  memory[at + 3] = qq;
  memory[at + 4] = r;
  memory[at + 5] = rr;
  memory[at + 6] = s;
  memory[at + 7] = ss;
}

function row(sections: Sections, k: number): [number, number, number, number, number] {
  const at = k * SECTION_WIDTH;
  return [sections[at]!, sections[at + 1]!, sections[at + 2]!, sections[at + 3]!, sections[at + 4]!];
}
