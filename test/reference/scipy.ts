import { execFileSync } from 'node:child_process';
import type { Static, TSchema } from 'typebox';
import { Value } from 'typebox/value';
import { PYTHON } from '../support/debian.ts';

/**
 * Runs a script in Debian's Python with NumPy as `np`, `scipy.signal` as `signal` and the input as `input`
 * (lists, dicts, numbers); what the script leaves in `output` comes back. Starting Python with SciPy takes about
 * half a second: gather all questions of a test file into one call.
 * Tests that call it stand under `describe.skipIf(!available('python3-scipy'))`.
 *
 * @example scipy('output = signal.butter(2, 0.2, output="sos")', null, Type.Array(Type.Array(Type.Number())))
 */
export function scipy<T extends TSchema>(script: string, input: unknown, output: T): Static<T> {
  const text = execFileSync(PYTHON, ['-c', PREFACE + script + EPILOGUE], {
    input: JSON.stringify(input, plain),
    encoding: 'utf8',
    maxBuffer: 1 << 28,
  });
  return Value.Parse(output, JSON.parse(text));
}

const PREFACE = `
import json, sys
import numpy as np
from scipy import signal
input = json.load(sys.stdin)
`;

const EPILOGUE = `
def _plain(value):
    if isinstance(value, np.ndarray): return value.tolist()
    if isinstance(value, np.generic): return value.item()
    raise TypeError(type(value).__name__)
json.dump(output, sys.stdout, default=_plain)
`;

function plain(_key: string, value: unknown): unknown {
  return ArrayBuffer.isView(value) ? Array.from(value as Float64Array) : value;
}
