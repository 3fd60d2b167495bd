import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Micros } from '#core/contract/time.ts';

/**
 * What the simulated bridge is and its definition does not say. All of it is plain data, so that it can be written
 * beside the samples as part of the truth.
 */
export interface BridgeParameters {
  ballast: Ballast;
  climate: Climate;
  /** How the bridge changes over time; several courses multiply. */
  condition: readonly ConditionCourse[];
  structure: StructureParameters;
  wheelRail: WheelRail;
  /** Amplitude that wind and ground keep up in every mode, r.m.s. acceleration at the antinode, m/s². */
  ambientMs2: number;
  /** By sensor id; sensors that are not named are ordinary ones. */
  sensors: Readonly<Record<string, SensorParameters>>;
}

/**
 * Amplitude dependence of a ballasted deck: over the observed range frequency falls and damping rises linearly with
 * the amplitude of the acceleration (M. Ülker-Kaustell and R. Karoumi, Eng. Struct. 33, 2011).
 */
export interface Ballast {
  /** Fall of frequency per m/s², as a share of the frequency at vanishing amplitude. */
  softening: number;
  /** Rise of the damping ratio per m/s². */
  dampingRise: number;
}

/** Air temperature as a sum of cycles, and what it does to frequency and damping. */
export interface Climate {
  meanC: number;
  /** Half of the swing from winter to summer, from night to day, and of the weather over days. */
  yearlyC: number;
  dailyC: number;
  weatherC: number;
  /** Change of frequency with the temperature of the steel, per K, relative to 10 °C. */
  warmPerK: number;
  /** Further rise of frequency per K below the knee, where the ballast is frozen. */
  frostPerK: number;
  /** Where the ballast begins to freeze, °C. */
  kneeC: number;
}

/** Factors on what the definition says, linear between the points and held before and after them. */
export interface ConditionCourse {
  /** Span id; all spans where absent. */
  span?: string;
  points: readonly ConditionPoint[];
}

export interface ConditionPoint {
  micros: Micros;
  frequency: number;
  damping: number;
  /** On the ballast's softening and rise of damping. */
  amplitudeDependence: number;
}

export interface StructureParameters {
  /** Bending modes of each span, and torsion modes. */
  bendingModes: number;
  torsionModes: number;
  /** True where the spans are one girder over all supports. */
  continuous: boolean;
  /** Radius of gyration of the deck's mass about its axis, m. */
  gyrationM: number;
  /** Distance of the track's centre from the deck's axis for a single track, m. */
  eccentricityM: number;
  /** Distance between the centres of two tracks, m. */
  trackSpacingM: number;
  /** Damping of a mode is that of the first times (f / f1) to this power. */
  dampingGrowth: number;
  /** Whether the unsprung mass of the axles on the deck lowers its frequencies. */
  unsprungMass: boolean;
}

/** Wheel–rail noise on the deck. */
export interface WheelRail {
  /** R.m.s. beside an axle of 112 kN at 44.4 m/s over the whole band of 20 to 200 Hz, m/s². */
  levelMs2: number;
  /** The level off the bridge against that on it, right behind the bearing, dB. */
  approachDb: number;
}

/** How a sensor falls short. Values in SI units of its quantity (contract/units.ts). */
export interface SensorParameters {
  noiseRms?: number;
  offset?: number;
  /** Amplitude of a slow wandering of the offset, with a period of half an hour. */
  drift?: number;
  /** Error of the scale: 0.02 reads 2 % high. */
  gainError?: number;
  /** Bits of the converter over `range`; 0 for none. 16 where the sensor has a range and this is absent. */
  bits?: number;
  /** Spikes that are no signal, and their largest height. */
  spikesPerHour?: number;
  spikeHeight?: number;
}

/** Departures from an ordinary bridge, part by part. */
export interface ParameterChanges {
  ballast?: Partial<Ballast>;
  climate?: Partial<Climate>;
  condition?: readonly ConditionCourse[];
  structure?: Partial<StructureParameters>;
  wheelRail?: Partial<WheelRail>;
  ambientMs2?: number;
  sensors?: Readonly<Record<string, SensorParameters>>;
}

/** Parameters of an ordinary bridge of this kind; each part may be replaced. */
export function bridgeParameters(definition: BridgeDefinition, changes: ParameterChanges = {}): BridgeParameters {
  const ballasted = definition.spans.some((span) => span.track === 'ballasted');
  return {
    ballast: { softening: ballasted ? 0.004 : 0.001, dampingRise: ballasted ? 0.003 : 0.0005, ...changes.ballast },
    climate: {
      meanC: 9,
      yearlyC: 9,
      dailyC: 3.5,
      weatherC: 3,
      warmPerK: -0.00018,
      frostPerK: ballasted ? 0.005 : 0,
      kneeC: 0,
      ...changes.climate,
    },
    condition: changes.condition ?? [],
    structure: {
      bendingModes: 3,
      torsionModes: 2,
      continuous: false,
      gyrationM: 1.35,
      eccentricityM: 0.06,
      trackSpacingM: 4,
      dampingGrowth: 0.3,
      unsprungMass: true,
      ...changes.structure,
    },
    wheelRail: { levelMs2: 0.12, approachDb: 14, ...changes.wheelRail },
    ambientMs2: changes.ambientMs2 ?? 0.0006,
    sensors: changes.sensors ?? {},
  };
}

/**
 * Parameters under which the model is the linear textbook beam, without noise of any kind: for comparison with closed
 * forms.
 */
export function cleanParameters(
  definition: BridgeDefinition,
  modes: { bending: number; torsion: number },
): BridgeParameters {
  const silent = { noiseRms: 0, bits: 0 };
  return bridgeParameters(definition, {
    ballast: { softening: 0, dampingRise: 0 },
    climate: { meanC: 10, yearlyC: 0, dailyC: 0, weatherC: 0, warmPerK: 0, frostPerK: 0 },
    structure: {
      bendingModes: modes.bending,
      torsionModes: modes.torsion,
      dampingGrowth: 0,
      unsprungMass: false,
    },
    wheelRail: { levelMs2: 0 },
    ambientMs2: 0,
    sensors: Object.fromEntries(definition.sensors.map((sensor) => [sensor.id, silent])),
  });
}
