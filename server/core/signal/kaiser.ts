/**
 * Kaiser's window (Kaiser 1974), not normalised: I0(β √(1 − t²)).
 *
 * @param t place in the window, −1 to 1; outside the window is 0
 * @param beta shape: larger has a wider main lobe and lower side lobes
 * @example kaiser(0, 2) // 2.2795853
 */
export function kaiser(t: number, beta: number): number {
  return Math.abs(t) <= 1 ? besselI0(beta * Math.sqrt(1 - t * t)) : 0;
}

/** Modified Bessel function of the first kind, order 0, by its power series (Abramowitz and Stegun 9.6.10). */
function besselI0(z: number): number {
  let term = 1;
  let sum = 1;
  for (let k = 1; term > sum * 1e-17; k++) {
    term *= (z / (2 * k)) ** 2;
    sum += term;
  }
  return sum;
}
