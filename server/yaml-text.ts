import { isAlias, isCollection, isMap, isPair, isScalar, isSeq, LineCounter, parseDocument } from 'yaml';
import type { Document, Node } from 'yaml';
import type { Complaint } from '#core/contract/errors.ts';

/** What a YAML text held, and where in it. */
interface YamlText {
  data: unknown;
  /** Line and column, from 1, of the field at a path; of its nearest parent where the field is absent. */
  placeOf: (path: readonly (string | number)[], atName?: boolean) => { line: number; column: number };
}

export type YamlReading = { ok: true; value: YamlText } | { ok: false; complaints: Complaint[] };

/** Limits of one file: far above any honest one, far below what could hurt. */
export const YAML_LIMITS = { bytes: 256 * 1024, depth: 16, aliases: 100, complaints: 20 } as const;

/**
 * Reads one YAML 1.2 document (core schema) and keeps the places of its fields.
 *
 * Aliases are followed up to a limit, so that a small file cannot unfold into a huge one.
 *
 * @param text the file's text
 * @param file its name, for complaints
 */
export function readYaml(text: string, file: string): YamlReading {
  const size = Buffer.byteLength(text);
  if (size > YAML_LIMITS.bytes) {
    return unsound(file, `found ${size} bytes, expected at most ${YAML_LIMITS.bytes}`);
  }
  if (text.includes('\uFFFD')) return unsound(file, 'found bytes that are not UTF-8, expected a UTF-8 text');
  const lines = new LineCounter();
  const document = parseDocument(text, {
    lineCounter: lines,
    prettyErrors: false,
    stringKeys: true,
    logLevel: 'error',
  });
  const at = (offset: number): { line: number; column: number } => {
    const { line, col } = lines.linePos(offset);
    return { line: Math.max(line, 1), column: Math.max(col, 1) };
  };
  // A warning (an unknown tag, say) means that the text says more than would be read.
  const faults = [...document.errors, ...document.warnings].slice(0, YAML_LIMITS.complaints);
  if (faults.length > 0) {
    return {
      ok: false,
      complaints: faults.map(({ message, pos }) => syntax(placed(file, at(pos[0])), message)),
    };
  }
  const tooDeep = firstBeyondDepth(document.contents);
  if (tooDeep !== null) {
    const detail = `found nesting deeper than ${YAML_LIMITS.depth}, expected a flatter file`;
    return { ok: false, complaints: [syntax(placed(file, at(tooDeep.range?.[0] ?? 0)), detail)] };
  }
  let data: unknown;
  try {
    data = document.toJS({ maxAliasCount: YAML_LIMITS.aliases });
  } catch (error) {
    return unsound(file, `aliases cannot be followed: ${error instanceof Error ? error.message : String(error)}`);
  }
  return {
    ok: true,
    value: { data, placeOf: (path, atName = false) => at(offsetOf(document, path, atName)) },
  };
}

/** `file:line:column`, as editors and terminals open it. */
export function placed(file: string, { line, column }: { line: number; column: number }): string {
  return `${file}:${line}:${column}`;
}

const syntax = (where: string, detail: string): Complaint => ({ code: 'DEFINITION_SYNTAX', where, detail });

const unsound = (where: string, detail: string): YamlReading => ({ ok: false, complaints: [syntax(where, detail)] });

/** The first node below the depth limit, breadth first so that depth cannot exhaust the stack. */
function firstBeyondDepth(root: Node | null): Node | null {
  let level: unknown[] = [root];
  for (let depth = 0; level.length > 0; depth++) {
    const next: unknown[] = [];
    for (const node of level) {
      if (!isCollection(node)) continue;
      if (depth >= YAML_LIMITS.depth) return node;
      for (const item of node.items) next.push(isPair(item) ? item.value : item);
    }
    level = next;
  }
  return null;
}

function offsetOf(document: Document.Parsed, path: readonly (string | number)[], atName: boolean): number {
  let node: unknown = document.contents;
  let offset = 0;
  for (const [depth, step] of path.entries()) {
    if (isAlias(node)) node = node.resolve(document);
    if (isMap(node)) {
      const pair = node.items.find(({ key }) => isScalar(key) && String(key.value) === String(step));
      if (pair === undefined) break;
      const key = startOf(pair.key);
      node = pair.value;
      // A value that starts on a later line is better found by its name.
      offset =
        atName && depth === path.length - 1
          ? (key ?? offset)
          : isScalar(node)
            ? (startOf(node) ?? key ?? offset)
            : (key ?? offset);
    } else if (isSeq(node) && typeof step === 'number') {
      node = node.items[step];
      offset = startOf(node) ?? offset;
    } else break;
  }
  return offset;
}

function startOf(node: unknown): number | null {
  return isScalar(node) || isCollection(node) || isAlias(node) ? (node.range?.[0] ?? null) : null;
}
