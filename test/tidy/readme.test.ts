import { execFileSync } from 'node:child_process';
import { existsSync, readdirSync, readFileSync } from 'node:fs';
import { describe, expect, it } from 'vitest';
import { readmeWithCodes } from './readme-codes.ts';

const ROOT = new URL('../..', import.meta.url).pathname;

describe('the documents', () => {
  it('list every error code as the code has it', () => {
    const { now, wanted } = readmeWithCodes();
    expect(now, 'run: node test/tidy/readme-codes.ts --write').toBe(wanted);
  });

  it('name only files and folders that exist', () => {
    const text = readFileSync(`${ROOT}DEVELOPERS.md`, 'utf8');
    const named = [...text.matchAll(/`((?:server|client|simulator|test|core)\/[\w./-]+)`/g)].map((match) => match[1]!);
    expect(named.length).toBeGreaterThan(10);
    for (const path of named) {
      const place = path.startsWith('core/') ? `server/${path}` : path;
      expect(existsSync(ROOT + place), path).toBe(true);
    }
  });

  it('name only npm scripts that exist', () => {
    const { scripts } = JSON.parse(readFileSync(`${ROOT}package.json`, 'utf8')) as { scripts: Record<string, string> };
    const text = readFileSync(`${ROOT}README.md`, 'utf8') + readFileSync(`${ROOT}DEVELOPERS.md`, 'utf8');
    for (const [, script] of text.matchAll(/npm (?:run (?:-s )?)?(demo|start|test|check|build|bench|spanbeat)\b/g)) {
      expect(scripts, script).toHaveProperty(script!);
    }
  });
});

describe('the top level', () => {
  it('holds what was agreed and nothing else', () => {
    const tracked = execFileSync('git', ['ls-files'], { cwd: ROOT, encoding: 'utf8' }).split('\n');
    const top = new Set(tracked.filter((path) => path !== '').map((path) => path.split('/')[0]!));
    const visible = [...top].filter((name) => !name.startsWith('.')).sort();
    expect(visible).toEqual(
      [
        'DEVELOPERS.md',
        'LICENSE',
        'README.md',
        'client',
        'package-lock.json',
        'package.json',
        'server',
        'simulator',
        'test',
        'tsconfig.json',
      ].sort(),
    );
    expect(readdirSync(ROOT)).toContain('.ci');
  });
});
