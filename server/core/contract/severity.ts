import { Type, type Static } from 'typebox';

/** The three levels of EN 13848-5: alert, intervention and immediate action limit. */
export const Severity = Type.Union([Type.Literal('AL'), Type.Literal('IL'), Type.Literal('IAL')]);
export type Severity = Static<typeof Severity>;

/** Mild to grave. */
export const SEVERITIES: readonly Severity[] = ['AL', 'IL', 'IAL'];

/** 0 for none, 1 to 3 for AL, IL, IAL. */
export function severityRank(severity: Severity | null): number {
  return severity === null ? 0 : SEVERITIES.indexOf(severity) + 1;
}

/** One value a level; a level that is not set is absent. */
export const Levels = Type.Object(
  {
    AL: Type.Optional(Type.Number({ exclusiveMinimum: 0 })),
    IL: Type.Optional(Type.Number({ exclusiveMinimum: 0 })),
    IAL: Type.Optional(Type.Number({ exclusiveMinimum: 0 })),
  },
  { additionalProperties: false, minProperties: 1 },
);
export type Levels = Static<typeof Levels>;

/**
 * The gravest level that a magnitude has passed (strictly above), or null.
 *
 * @example severityOf(2.9, { AL: 2.2, IL: 2.8, IAL: 3.5 }) // 'IL'
 */
export function severityOf(magnitude: number, levels: Levels): Severity | null {
  for (const severity of ['IAL', 'IL', 'AL'] as const) {
    const limit = levels[severity];
    if (limit !== undefined && magnitude > limit) return severity;
  }
  return null;
}
