/**
 * Closed forms for forces that run with constant speed over a simply supported Euler–Bernoulli beam
 * (L. Frýba, Vibration of Solids and Structures under Moving Loads, ch. 1; the damped form is the textbook
 * solution of q″ + 2ζωq′ + ω²q = F sin Ωt for 0 ≤ t ≤ L/v, from rest).
 */

/** One bending mode, of shape sin(nπx/L). */
export interface BeamMode {
  lengthM: number;
  massPerMetreKg: number;
  /** n of the shape, from 1. */
  order: number;
  /** Undamped natural frequency of this mode. */
  frequencyHz: number;
  /** Damping ratio, 1 = critical; below 1. */
  zeta: number;
}

/** Modal coordinate, in metres at the antinode of the shape, with its first two time derivatives. */
export interface Motion {
  displacementM: number;
  velocityMs: number;
  accelerationMs2: number;
}

/** One force of a train. */
export interface MovingForce {
  /** How far behind the train's first force it runs, m. */
  behindM: number;
  forceN: number;
}

/**
 * The bending modes 1 … count of a uniform simply supported beam: f_n = n² f1, all with the same damping ratio.
 *
 * @example beamModes({ lengthM: 20, massPerMetreKg: 1e4, f1Hz: 5, zeta: 0.01 }, 3)[2].frequencyHz // 45
 */
export function beamModes(
  beam: { lengthM: number; massPerMetreKg: number; f1Hz: number; zeta: number },
  count: number,
): BeamMode[] {
  return Array.from({ length: count }, (_, index) => ({
    lengthM: beam.lengthM,
    massPerMetreKg: beam.massPerMetreKg,
    order: index + 1,
    frequencyHz: (index + 1) ** 2 * beam.f1Hz,
    zeta: beam.zeta,
  }));
}

/**
 * Motion of one mode under one force that enters the beam at t = 0.
 *
 * @param mode the mode
 * @param forceN the constant force, N, positive in the direction of positive displacement
 * @param speedMs its speed, m/s, positive
 * @param seconds time since it entered; before 0 the beam is at rest, after L/v it vibrates freely
 * @returns modal coordinate and derivatives; multiply by sin(nπx/L) for a place on the beam
 * @example
 * // L 20 m, 10 t/m, 5 Hz, undamped, 200 kN at 50 m/s: a quarter period after exit the mode swings with 16/15 m/s²
 * movingForceMotion({ lengthM: 20, massPerMetreKg: 1e4, order: 1, frequencyHz: 5, zeta: 0 }, 2e5, 50, 0.45)
 *   .accelerationMs2 // 1.0666667
 */
export function movingForceMotion(mode: BeamMode, forceN: number, speedMs: number, seconds: number): Motion {
  const crossingS = mode.lengthM / speedMs;
  if (seconds <= 0) return { displacementM: 0, velocityMs: 0, accelerationMs2: 0 };
  if (seconds <= crossingS) return forcedMotion(mode, forceN, speedMs, seconds);
  return freeMotion(mode, forcedMotion(mode, forceN, speedMs, crossingS), seconds - crossingS);
}

/**
 * Motion of one mode under a train of forces: the sum of the single ones.
 *
 * @param seconds time since the train's first force entered
 */
export function trainMotion(mode: BeamMode, forces: readonly MovingForce[], speedMs: number, seconds: number): Motion {
  const sum: Motion = { displacementM: 0, velocityMs: 0, accelerationMs2: 0 };
  for (const { behindM, forceN } of forces) {
    const one = movingForceMotion(mode, forceN, speedMs, seconds - behindM / speedMs);
    sum.displacementM += one.displacementM;
    sum.velocityMs += one.velocityMs;
    sum.accelerationMs2 += one.accelerationMs2;
  }
  return sum;
}

/**
 * Motion of the beam at a place: the modes weighted by their shapes.
 *
 * @param alongM place from the first bearing in running direction, m
 */
export function beamMotion(
  modes: readonly BeamMode[],
  forces: readonly MovingForce[],
  speedMs: number,
  alongM: number,
  seconds: number,
): Motion {
  const sum: Motion = { displacementM: 0, velocityMs: 0, accelerationMs2: 0 };
  for (const mode of modes) {
    const one = trainMotion(mode, forces, speedMs, seconds);
    const shape = Math.sin((mode.order * Math.PI * alongM) / mode.lengthM);
    sum.displacementM += shape * one.displacementM;
    sum.velocityMs += shape * one.velocityMs;
    sum.accelerationMs2 += shape * one.accelerationMs2;
  }
  return sum;
}

/**
 * Free motion of a mode from a given state.
 *
 * @param state displacement and velocity at t = 0
 * @param seconds time since
 */
export function freeMotion(
  mode: Pick<BeamMode, 'frequencyHz' | 'zeta'>,
  state: Pick<Motion, 'displacementM' | 'velocityMs'>,
  seconds: number,
): Motion {
  const omega = 2 * Math.PI * mode.frequencyHz;
  const decay = mode.zeta * omega;
  const damped = omega * Math.sqrt(1 - mode.zeta ** 2);
  const cosine = state.displacementM;
  const sine = (state.velocityMs + decay * state.displacementM) / damped;
  const fall = Math.exp(-decay * seconds);
  const c = Math.cos(damped * seconds);
  const s = Math.sin(damped * seconds);
  const displacementM = fall * (cosine * c + sine * s);
  const velocityMs = fall * ((damped * sine - decay * cosine) * c - (damped * cosine + decay * sine) * s);
  return { displacementM, velocityMs, accelerationMs2: -2 * decay * velocityMs - omega ** 2 * displacementM };
}

/**
 * Amplitude of the acceleration with which a mode begins to vibrate freely from a given state, m/s²:
 * ω² times the amplitude of its displacement.
 */
export function freeAccelerationAmplitude(
  mode: Pick<BeamMode, 'frequencyHz' | 'zeta'>,
  state: Pick<Motion, 'displacementM' | 'velocityMs'>,
): number {
  const omega = 2 * Math.PI * mode.frequencyHz;
  const damped = omega * Math.sqrt(1 - mode.zeta ** 2);
  return (
    omega ** 2 * Math.hypot(state.displacementM, (state.velocityMs + mode.zeta * omega * state.displacementM) / damped)
  );
}

/** Below this distance of Ω² from ω², relative, an undamped mode is taken as met exactly at its frequency. */
const COINCIDENCE = 1e-9;

function forcedMotion(mode: BeamMode, forceN: number, speedMs: number, t: number): Motion {
  const force = (2 * forceN) / (mode.massPerMetreKg * mode.lengthM);
  const omega = 2 * Math.PI * mode.frequencyHz;
  const drive = (mode.order * Math.PI * speedMs) / mode.lengthM;
  const decay = mode.zeta * omega;
  const gap = omega ** 2 - drive ** 2;
  const denominator = gap ** 2 + 4 * decay ** 2 * drive ** 2;
  let displacementM: number;
  let velocityMs: number;
  if (denominator < (COINCIDENCE * omega ** 2) ** 2) {
    // limit of the closed form for ζ = 0 and Ω → ω
    displacementM = (force / (2 * omega ** 2)) * (Math.sin(omega * t) - omega * t * Math.cos(omega * t));
    velocityMs = (force / 2) * t * Math.sin(omega * t);
  } else {
    // steady part, and the free motion that cancels its displacement and velocity at t = 0
    const scale = force / denominator;
    const inPhase = scale * gap;
    const quadrature = -2 * scale * decay * drive;
    const free = freeMotion(mode, { displacementM: -quadrature, velocityMs: -drive * inPhase }, t);
    const s = Math.sin(drive * t);
    const c = Math.cos(drive * t);
    displacementM = inPhase * s + quadrature * c + free.displacementM;
    velocityMs = drive * (inPhase * c - quadrature * s) + free.velocityMs;
  }
  const accelerationMs2 = force * Math.sin(drive * t) - 2 * decay * velocityMs - omega ** 2 * displacementM;
  return { displacementM, velocityMs, accelerationMs2 };
}
