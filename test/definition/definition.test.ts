import { readFileSync } from 'node:fs';
import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { stringify } from 'yaml';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { checkDefinition } from '#core/contract/definition-check.ts';
import { BridgeDefinition as Schema } from '#core/contract/bridge.ts';
import { nearestName } from '#core/contract/nearest-name.ts';
import { describeSchema, schemaAt, showFound } from '#core/contract/schema-words.ts';
import { fieldName } from '#core/contract/shape.ts';
import { DEMONSTRATION_FILES } from '../../simulator/demonstration.ts';
import { decodeDefinition, readDefinition } from '../../server/definition.ts';
import { YAML_LIMITS } from '../../server/yaml-text.ts';
import { aDefinition } from '../support/specimen.ts';

const GOOD = stringify(aDefinition());

/** Complaints about a text, each as code, place and detail in one line. */
function complaintsOf(text: string): string[] {
  const reading = decodeDefinition(text, 'bridge.yaml');
  return reading.ok ? [] : reading.complaints.map(({ code, where, detail }) => `${code} ${where ?? ''} ${detail}`);
}

/** Complaints about the good definition with a change. */
function complaintsAfter(change: (definition: BridgeDefinition) => void): string[] {
  const definition = aDefinition();
  change(definition);
  return complaintsOf(stringify(definition));
}

describe('a bridge definition', () => {
  it('is given back with its text where it is sound', () => {
    const reading = decodeDefinition(GOOD, 'bridge.yaml');
    expect(reading).toEqual({ ok: true, value: { definition: aDefinition(), text: GOOD } });
  });

  it.each(DEMONSTRATION_FILES.map((url) => [url.pathname.split('/').at(-1), url] as const))(
    'of the demonstration is sound: %s',
    (_, url) => {
      expect(complaintsOf(readFileSync(url, 'utf8'))).toEqual([]);
    },
  );

  it('may use anchors, whose places are found', () => {
    const text = GOOD.replace('levels:\n', 'levels: &usual\n');
    const more = `${text}  - id: second\n    quantity: peak deck acceleration\n    levels: *usual\n    band: EN 1990 B9\n    source: x\n`;
    const line = more.split('\n').findIndex((each) => each.includes('EN 1990 B9')) + 1;
    expect(complaintsOf(more)).toEqual([
      `DEFINITION_INVALID bridge.yaml:${line}:11 limits[1].band: found "EN 1990 B9", expected "EN 1990 A2" or a map with upToHz`,
    ]);
  });

  it('may be read from JSON, which is YAML', () => {
    expect(complaintsOf(JSON.stringify(aDefinition(), null, 2))).toEqual([]);
  });
});

describe('complaints about a definition', () => {
  it('name file, line, column, field, what was found and what was expected', () => {
    const text = GOOD.replace('chainageKm: 41.32', 'chainageKm: far');
    const line = text.split('\n').findIndex((each) => each.startsWith('chainageKm')) + 1;
    expect(complaintsOf(text)).toEqual([
      `DEFINITION_INVALID bridge.yaml:${line}:13 chainageKm: found "far", expected a number, at least 0, at most 100000`,
    ]);
  });

  it('come all at once, in the order of the file', () => {
    const text = GOOD.replace('id: ottermere', 'id: Otter Mere')
      .replace('lengthM: 17.6', 'lengthM: -17.6')
      .replace('structure: steel trough', 'structure: wood')
      .replace('rateHz: 500', 'rateHz: fast');
    const complaints = complaintsOf(text);
    expect(complaints).toHaveLength(4);
    expect(complaints.map((each) => /(?<=:\d+:\d+ )[^:]+/.exec(each)?.[0])).toEqual([
      'id',
      'spans[0].lengthM',
      'spans[0].structure',
      'sensors[0].rateHz',
    ]);
    expect(complaints[2]).toContain('found "wood", expected "steel trough" or "steel plate girder"');
  });

  it('propose the nearest name for an unknown field, at the place of the name', () => {
    const text = GOOD.replace('lengthM: 17.6', 'lenghtM: 17.6');
    const line = text.split('\n').findIndex((each) => each.includes('lenghtM')) + 1;
    expect(complaintsOf(text)).toEqual([
      expect.stringMatching(/spans\[0\]\.lengthM: found nothing, expected a number, above 0, at most 1000$/),
      `DEFINITION_INVALID bridge.yaml:${line}:5 spans[0].lenghtM: unknown field; did you mean lengthM?`,
    ]);
  });

  it('name the known fields where no name is near', () => {
    expect(complaintsOf(`${GOOD}colour: red\n`)).toEqual([
      expect.stringContaining('colour: unknown field; known here are spanbeat, id, name'),
    ]);
  });

  it('are told of an empty file, a list, and another version', () => {
    expect(complaintsOf('')).toEqual([expect.stringContaining('the definition: found nothing, expected a map with')]);
    expect(complaintsOf('- 1\n')).toEqual([expect.stringContaining('found a list of 1, expected a map')]);
    expect(complaintsOf(GOOD.replace('spanbeat: 1', 'spanbeat: 2'))).toEqual([
      expect.stringContaining('spanbeat: found 2, expected 1'),
    ]);
  });

  it('are at most fifty', () => {
    const definition = aDefinition();
    const sensors = Array.from({ length: 200 }, () => ({ ...definition.sensors[0], rateHz: 'x' }));
    expect(complaintsOf(stringify({ ...definition, sensors }))).toHaveLength(50);
  });

  it('do not change how many errors others get from the schema library', async () => {
    const { Settings } = await import('typebox/system');
    const before = Settings.Get().maxErrors;
    complaintsOf('{}');
    expect(Settings.Get().maxErrors).toBe(before);
  });
});

describe('what no schema can say is checked too', () => {
  const sensor = (definition: BridgeDefinition, at = 0): BridgeDefinition['sensors'][number] => definition.sensors[at]!;

  it.each<[string, string, string, (definition: BridgeDefinition) => void]>([
    [
      'two equal sensor ids',
      'DEFINITION_DUPLICATE_ID',
      'sensors[1].id: "A1" is also the id of sensors[0]',
      (d) => (sensor(d, 1).id = 'A1'),
    ],
    [
      'two equal span ids',
      'DEFINITION_DUPLICATE_ID',
      'spans[1].id: "main"',
      (d) => d.spans.push({ ...d.spans[0]!, startM: 20 }),
    ],
    [
      'two equal logger ids',
      'DEFINITION_DUPLICATE_ID',
      'loggers[1].id: "north"',
      (d) => d.loggers.push({ id: 'north' }),
    ],
    ['two equal limit ids', 'DEFINITION_DUPLICATE_ID', 'limits[1].id: "ballast"', (d) => d.limits.push(d.limits[0]!)],
    [
      'a logger that is not there',
      'DEFINITION_REFERENCE',
      'sensors[0].logger: no logger "nort"; did you mean north?',
      (d) => (sensor(d).logger = 'nort'),
    ],
    [
      'a span that is not there',
      'DEFINITION_REFERENCE',
      'limits[0].spans[0]: no span "east"; defined are main',
      (d) => (d.limits[0]!.spans = ['east']),
    ],
    [
      'a mapped sensor that is not there',
      'DEFINITION_REFERENCE',
      'loggers[0].channels.c1: no sensor "A9"',
      (d) => (d.loggers[0]!.channels = { c1: 'A9' }),
    ],
    [
      'a mapped sensor of another logger',
      'DEFINITION_REFERENCE',
      'belongs to logger "north", expected one of "south"',
      (d) => d.loggers.push({ id: 'south', channels: { c1: 'A1' } }),
    ],
    [
      'a sensor mapped twice',
      'DEFINITION_DUPLICATE_ID',
      'loggers[0].channels.c2: sensor "A1" is already fed by "c1"',
      (d) => (d.loggers[0]!.channels = { c1: 'A1', c2: 'A1' }),
    ],
    [
      'a wildcard inside a level',
      'DEFINITION_INVALID',
      'loggers[0].topic: found "a/b+/c"',
      (d) => (d.loggers[0]!.topic = 'a/b+/c'),
    ],
    [
      'a wildcard for the rest in the middle',
      'DEFINITION_INVALID',
      'loggers[0].topic: found "a/#/c"',
      (d) => (d.loggers[0]!.topic = 'a/#/c'),
    ],
    [
      'a unit of another quantity',
      'UNIT_UNKNOWN',
      'sensors[0].unit: found "mm", expected a unit of acceleration: m/s2, m/s², mm/s2, g, mg',
      (d) => (sensor(d).unit = 'mm'),
    ],
    ['a scale of nothing', 'DEFINITION_INVALID', 'sensors[0].scale: found 0', (d) => (sensor(d).scale = 0)],
    [
      'a range with its ends swapped',
      'DEFINITION_INVALID',
      'sensors[0].range: found 2 to -2, expected the lower end first',
      (d) => (sensor(d).range = [2, -2]),
    ],
    [
      'vibration below 20 Hz',
      'DEFINITION_INVALID',
      'sensors[0].rateHz: found 10, expected 20 to 20000 Hz for acceleration',
      (d) => Object.assign(d, { limits: [] }).sensors.forEach((each) => (each.rateHz = Math.min(each.rateHz, 10))),
    ],
    [
      'a sensor far from the bridge',
      'DEFINITION_INVALID',
      'sensors[0].alongM: found 68, expected -50 to 67.6 m',
      (d) => (sensor(d).alongM = 68),
    ],
    [
      'a sensor far before the bridge',
      'DEFINITION_INVALID',
      'sensors[0].alongM: found -51',
      (d) => (sensor(d).alongM = -51),
    ],
    [
      'a thermometer that counts axles',
      'DEFINITION_INVALID',
      'sensors[4].countsAxles: found true',
      (d) => (sensor(d, 4).countsAxles = true),
    ],
    [
      'spans that overlap',
      'DEFINITION_INVALID',
      'spans[1].startM: found 17, expected 17.6 or more: span "main" reaches to 17.6 m',
      (d) => d.spans.push({ ...d.spans[0]!, id: 'west', startM: 17 }),
    ],
    [
      'levels out of order',
      'DEFINITION_INVALID',
      'limits[0].levels.IL: found 2, expected more than AL (2.2): AL < IL < IAL',
      (d) => (d.limits[0]!.levels.IL = 2),
    ],
    [
      'equal levels',
      'DEFINITION_INVALID',
      'limits[0].levels.IAL: found 2.8, expected more than IL (2.8)',
      (d) => (d.limits[0]!.levels.IAL = 2.8),
    ],
    [
      'no level',
      'DEFINITION_INVALID',
      'limits[0].levels: found a map, expected a map with at least 1 of AL, IL, IAL',
      (d) => (d.limits[0]!.levels = {}),
    ],
    [
      'a time zone nobody knows',
      'DEFINITION_INVALID',
      'timeZone: found "Mars/Olympus", expected an IANA name',
      (d) => (d.timeZone = 'Mars/Olympus'),
    ],
    [
      'a rate too low for the band of a limit',
      'DEFINITION_INVALID',
      'sensors[0].rateHz: found 60, expected 67 or more: limit "ballast" needs frequencies up to 30 Hz',
      (d) => (sensor(d).rateHz = 60),
    ],
    [
      'a rate too low for f3 of the span',
      'DEFINITION_INVALID',
      'expected 556 or more: limit "ballast" needs frequencies up to 250 Hz',
      (d) => (d.spans[0]!.frequenciesHz = { f3: 250 }),
    ],
    [
      'a rate too low for a fixed band',
      'DEFINITION_INVALID',
      'sensors[3].rateHz: found 500, expected 667 or more',
      (d) => (d.limits[0]!.band = { upToHz: 300 }),
    ],
  ])('%s', (_, code, words, change) => {
    const complaints = complaintsAfter(change);
    expect(complaints.length).toBeGreaterThan(0);
    expect(complaints.some((each) => each.startsWith(`${code} bridge.yaml:`) && each.includes(words))).toBe(true);
    expect(complaints.every((each) => each.startsWith(code))).toBe(true);
  });

  it.each<[string, (definition: BridgeDefinition) => void]>([
    ['a slow thermometer', (d) => (sensor(d, 4).rateHz = 0.01)],
    ['a sensor on the approach', (d) => (sensor(d).alongM = -50)],
    [
      'spans that touch, in any order of the file',
      (d) => d.spans.unshift({ ...d.spans[0]!, id: 'west', startM: 17.6 }),
    ],
    ['a single level', (d) => (d.limits[0]!.levels = { IAL: 3.5 })],
    ['no limit', (d) => (d.limits = [])],
    ['a topic with wildcards', (d) => (d.loggers[0]!.topic = 'site/+/data/#')],
    ['a slow sensor that no limit speaks of', (d) => Object.assign(sensor(d), { rateHz: 50, mount: 'bearing' })],
    [
      'a limit for another span',
      (d) => {
        d.spans.push({ ...d.spans[0]!, id: 'west', startM: 17.6 });
        d.limits[0]!.spans = ['west'];
        sensor(d).rateHz = 50;
      },
    ],
  ])('and nothing is said of %s', (_, change) => {
    expect(complaintsAfter(change)).toEqual([]);
  });
});

describe('a definition with wrong fields', () => {
  it('is told at once what else is wrong, as far as that does not depend on them', () => {
    const complaints = complaintsAfter((d) => {
      const [first, second, third] = d.sensors;
      Object.assign(d, { chainageKm: 'far', timeZone: 'Europe/Atlantis' });
      Object.assign(first!, { acrossM: 'left', logger: 'nroth', unit: 'Hz' });
      Object.assign(second!, { id: third!.id, mount: 'roof' });
      third!.rateHz = 30;
      Object.assign(d.limits[0]!, { source: 3, levels: { AL: 3, IL: 2, IAL: 'high' } });
    });
    expect(complaints.map((each) => / ([^: ]+: .*)/.exec(each.slice(each.indexOf('bridge.yaml')))?.[1])).toEqual([
      expect.stringContaining('chainageKm: found "far"'),
      expect.stringContaining('timeZone: found "Europe/Atlantis"'),
      expect.stringContaining('sensors[0].logger: no logger "nroth"; did you mean north?'),
      expect.stringContaining('sensors[0].acrossM: found "left"'),
      expect.stringContaining('sensors[0].unit: found "Hz", expected a unit of acceleration'),
      expect.stringContaining('sensors[1].mount: found "roof"'),
      expect.stringContaining('sensors[2].id: "A3" is also the id of sensors[1]'),
      expect.stringContaining('sensors[2].rateHz: found 30, expected 67 or more'),
      expect.stringContaining('limits[0].levels.IL: found 2, expected more than AL (3)'),
      expect.stringContaining('limits[0].levels.IAL: found "high"'),
      expect.stringContaining('limits[0].source: found 3'),
    ]);
  });

  const whole = aDefinition({
    spans: [
      { ...aDefinition().spans[0]!, frequenciesHz: { f1: 5.2, f3: 48 } },
      { ...aDefinition().spans[0]!, id: 'west', startM: 17.6 },
    ],
    loggers: [{ id: 'north', channels: { ch1: 'A1' }, topic: 'site/data' }],
    limits: [{ ...aDefinition().limits[0]!, spans: ['west'] }],
  });
  // At midspan of the span that the limit does not hold for; too slow for it where it did.
  Object.assign(whole.sensors[0]!, { rateHz: 50, range: [-20, 20] });

  it.each(fieldsOf(whole).map((path) => [fieldName(path, 'the definition'), path] as const))(
    'is not blamed for more than the wrong one: %s',
    (name, path) => {
      expect(complaintsOf(stringify(whole))).toEqual([]);
      const data = structuredClone(whole);
      const holder = path.slice(0, -1).reduce<unknown>((value, step) => (value as Record<string, unknown>)[step], data);
      (holder as Record<string, unknown>)[path.at(-1)!] = { wrong: true };
      const verdict = checkDefinition(data, () => true);
      const blamed = verdict.ok ? [] : verdict.problems.map((problem) => fieldName(problem.path, 'the definition'));
      expect(blamed).not.toEqual([]);
      // A field of a choice is told by the choice.
      expect(blamed.every((field) => field.startsWith(name) || name.startsWith(field))).toBe(true);
    },
  );
});

/** The paths of all fields and entries, from the outside in. */
function fieldsOf(value: unknown, path: (string | number)[] = []): (string | number)[][] {
  if (typeof value !== 'object' || value === null) return [];
  return Object.entries(value).flatMap(([key, inner]) => {
    const own = [...path, Array.isArray(value) ? Number(key) : key];
    return [own, ...fieldsOf(inner, own)];
  });
}

describe('a file that wants to do harm', () => {
  it('with aliases that unfold without end is refused', () => {
    const levels = Array.from({ length: 30 }, (_, i) => `l${i + 1}: &l${i + 1} [${`*l${i}, `.repeat(9)}*l${i}]`);
    const text = `l0: &l0 [x, x, x, x, x, x, x, x, x, x]\n${levels.join('\n')}\n`;
    expect(complaintsOf(text)).toEqual([
      expect.stringMatching(/^DEFINITION_SYNTAX bridge.yaml aliases cannot be followed/),
    ]);
  });

  it.each([
    ['flow lists', '['.repeat(100_000)],
    ['closed flow lists', `${'['.repeat(2000)}${']'.repeat(2000)}`],
    ['block maps', Array.from({ length: 300 }, (_, i) => `${' '.repeat(i)}a:`).join('\n')],
  ])('nested deeply in %s is refused', (_, text) => {
    expect(complaintsOf(text)[0]).toMatch(/^DEFINITION_SYNTAX bridge\.yaml/);
  });

  it('nested just beyond the limit is refused by name, and up to it judged by its content', () => {
    const nested = (depth: number): string => `${'{a: '.repeat(depth)}1${'}'.repeat(depth)}`;
    expect(complaintsOf(nested(YAML_LIMITS.depth + 1))[0]).toContain('nesting deeper than 16');
    expect(complaintsOf(nested(YAML_LIMITS.depth))[0]).toMatch(/^DEFINITION_INVALID/);
  });

  it('of more than 256 kB is refused, and of just that much read', () => {
    const padded = (bytes: number): string => `${GOOD}#${'x'.repeat(bytes - GOOD.length - 2)}\n`;
    expect(complaintsOf(padded(YAML_LIMITS.bytes))).toEqual([]);
    expect(complaintsOf(padded(YAML_LIMITS.bytes + 1))).toEqual([
      `DEFINITION_SYNTAX bridge.yaml found ${YAML_LIMITS.bytes + 1} bytes, expected at most ${YAML_LIMITS.bytes}`,
    ]);
  });

  it('with a field called __proto__ changes no prototype', () => {
    expect(complaintsOf('__proto__: {polluted: 1}\nconstructor: 2\n').length).toBeGreaterThan(0);
    expect(({} as Record<string, unknown>)['polluted']).toBeUndefined();
  });

  it.each([
    ['a tab', 'id: a\n\tname: b\n'],
    ['an open quote', 'id: "a\n'],
    ['two equal keys', 'id: a\nid: b\n'],
    ['an alias of nothing', 'id: *nothing\n'],
    ['two documents', '--- \nid: a\n---\nid: b\n'],
    ['an unknown tag', 'id: !secret a\n'],
    ['bytes that are not UTF-8', Buffer.from([0x69, 0x64, 0x3a, 0x20, 0xff, 0xfe]).toString('utf8')],
  ])('that is no sound YAML is told so: %s', (_, text) => {
    const complaints = complaintsOf(text);
    expect(complaints.length).toBeGreaterThan(0);
    expect(complaints.every((each) => each.startsWith('DEFINITION_SYNTAX bridge.yaml'))).toBe(true);
  });

  it('never throws, whatever it holds', () => {
    fc.assert(
      fc.property(fc.oneof(fc.string({ unit: 'binary', maxLength: 300 }), fc.json()), (text) => {
        expect(complaintsOf(text).length).toBeGreaterThan(0);
      }),
      { numRuns: 500, seed: 47110 },
    );
  });

  it('never throws, whatever stands in a field of a good one', () => {
    const paths = fc.constantFrom(
      'id',
      'name',
      'line',
      'chainageKm',
      'timeZone',
      'spans',
      'loggers',
      'sensors',
      'limits',
    );
    fc.assert(
      fc.property(paths, fc.anything(), (field, value) => {
        const verdict = checkDefinition({ ...aDefinition(), [field]: value }, () => true);
        expect(verdict.ok || verdict.problems.length > 0).toBe(true);
      }),
      { numRuns: 500, seed: 47110 },
    );
  });
});

describe('a definition file', () => {
  it('that is not there is a complaint', async () => {
    expect(await readDefinition('/nowhere/bridge.yaml')).toMatchObject({
      ok: false,
      complaints: [{ code: 'DEFINITION_UNREADABLE', where: '/nowhere/bridge.yaml' }],
    });
  });
});

describe('words for a schema', () => {
  it('say what each kind of field expects', () => {
    const words = (path: string): string => describeSchema(schemaAt(Schema, path));
    expect(words('#/properties/spans/items/properties/lengthM')).toBe('a number, above 0, at most 1000');
    expect(words('#/properties/spans/items/properties/tracks')).toBe('a whole number, at least 1, at most 8');
    expect(words('#/properties/name')).toBe('a text of 1 to 200 characters');
    expect(words('#/properties/sensors/items/properties/countsAxles')).toBe('true or false');
    expect(words('#/properties/sensors/items/properties/range')).toBe('a list of 2 entries');
    expect(words('#/properties/limits')).toBe('a list of at most 32 entries');
    expect(words('#/properties/loggers/items/properties/channels')).toBe('a map');
    expect(words('#/properties/limits/items/properties/spans')).toBe('a list of at least 1 entry');
    expect(words('#/properties/nowhere/below')).toBe('something else');
    expect(describeSchema({ type: 'string', pattern: '^x$' })).toBe('a text that fits ^x$');
    expect(describeSchema({ type: 'string' })).toBe('a text');
  });

  it('show a value briefly', () => {
    expect(showFound('x'.repeat(100))).toHaveLength(58);
    expect(showFound(null)).toBe('nothing');
    expect(showFound({ a: 1 })).toBe('a map');
    expect(showFound(true)).toBe('true');
  });

  it('name a field by its path', () => {
    expect(fieldName(['sensors', 2, 'range', 0], 'the definition')).toBe('sensors[2].range[0]');
    expect(fieldName([], 'the definition')).toBe('the definition');
  });
});

describe('the nearest name', () => {
  it('forgives capitals, dashes, swapped, missing and extra letters', () => {
    const known = ['lengthM', 'startM', 'massPerMetreKg'];
    expect(nearestName('length_m', known)).toBe('lengthM');
    expect(nearestName('lenghtM', known)).toBe('lengthM');
    expect(nearestName('massPerMeterKg', known)).toBe('massPerMetreKg');
  });

  it('is none where nothing is near', () => {
    expect(nearestName('colour', ['lengthM', 'startM'])).toBeNull();
    expect(nearestName('x'.repeat(1000), ['x'])).toBeNull();
    expect(nearestName('a', [])).toBeNull();
  });
});
