import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { Climate, ConditionCourse, ConditionPoint } from './parameters.ts';
import { RandomStream } from './random.ts';

const DAY_S = 86_400;
const YEAR_S = 365.25 * DAY_S;

/** Where the definition's frequency holds, °C. */
const REFERENCE_C = 10;

/** How gradually the knee bends, K. */
const KNEE_WIDTH_K = 0.7;

/** Frozen ballast stiffens a deck by up to about a third and no more. */
const LARGEST_FROST = 0.35;

/** Periods of the weather, days; they share no common multiple of note. */
const WEATHER_DAYS = [3.7, 5.9, 9.7] as const;

/** Temperatures of a place over the years, by formula: any moment can be asked for. */
export interface Weather {
  airC(micros: Micros): number;
  /** Steel follows the air an hour and a half late and a little less. */
  steelC(micros: Micros): number;
  /** Ballast follows by half a day, and feels little of the night. */
  ballastC(micros: Micros): number;
}

export function createWeather(climate: Climate, seed: number): Weather {
  const random = new RandomStream(seed, 'weather');
  const phases = WEATHER_DAYS.map(() => random.uniform(0, 2 * Math.PI));
  const slow = (seconds: number): number => {
    // coldest in the middle of January
    const season = -climate.yearlyC * Math.cos((2 * Math.PI * (seconds - 15 * DAY_S)) / YEAR_S);
    const weather = WEATHER_DAYS.reduce(
      (sum, days, i) => sum + Math.sin((2 * Math.PI * seconds) / (days * DAY_S) + phases[i]!),
      0,
    );
    return climate.meanC + season + (climate.weatherC / Math.sqrt(1.5)) * weather;
  };
  // warmest at three in the afternoon
  const daily = (seconds: number): number => climate.dailyC * Math.cos((2 * Math.PI * (seconds - 15 * 3600)) / DAY_S);
  const at = (micros: Micros, lagS: number, share: number): number => {
    const seconds = micros / MICROS_PER_SECOND - lagS;
    return slow(seconds) + share * daily(seconds);
  };
  return {
    airC: (micros) => at(micros, 0, 1),
    steelC: (micros) => at(micros, 5400, 0.85),
    ballastC: (micros) => at(micros, 43_200, 0.25),
  };
}

/** Factors on frequency, damping and amplitude dependence of a span. */
export type Factors = Omit<ConditionPoint, 'micros'>;

/** What temperature makes of frequency and damping: steel's modulus, and a knee where the ballast freezes. */
export function climateFactors(climate: Climate, weather: Weather, micros: Micros): Factors {
  const belowKnee = (climate.kneeC - weather.ballastC(micros)) / KNEE_WIDTH_K;
  const frozenK = KNEE_WIDTH_K * (belowKnee > 30 ? belowKnee : Math.log1p(Math.exp(belowKnee)));
  const frost = Math.min(LARGEST_FROST, climate.frostPerK * frozenK);
  return {
    frequency: (1 + climate.warmPerK * (weather.steelC(micros) - REFERENCE_C)) * (1 + frost),
    // ice binds the stones: less sliding, less damping, less dependence on amplitude
    damping: 1 - frost,
    amplitudeDependence: 1 - 2 * frost,
  };
}

/** What the state of the ballast and works make of them at a moment. */
export function conditionFactors(courses: readonly ConditionCourse[], span: string, micros: Micros): Factors {
  const product: Factors = { frequency: 1, damping: 1, amplitudeDependence: 1 };
  for (const course of courses) {
    if (course.span !== undefined && course.span !== span) continue;
    const factors = between(course.points, micros);
    product.frequency *= factors.frequency;
    product.damping *= factors.damping;
    product.amplitudeDependence *= factors.amplitudeDependence;
  }
  return product;
}

function between(points: readonly ConditionPoint[], micros: Micros): Factors {
  const later = points.findIndex((point) => point.micros > micros);
  const after = later === -1 ? points.at(-1) : points[later];
  const before = later > 0 ? points[later - 1] : later === -1 ? points.at(-1) : points[0];
  if (after === undefined || before === undefined) return { frequency: 1, damping: 1, amplitudeDependence: 1 };
  const share = after === before ? 0 : (micros - before.micros) / (after.micros - before.micros);
  const mix = (from: number, to: number): number => from + share * (to - from);
  return {
    frequency: mix(before.frequency, after.frequency),
    damping: mix(before.damping, after.damping),
    amplitudeDependence: mix(before.amplitudeDependence, after.amplitudeDependence),
  };
}
