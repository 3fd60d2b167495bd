import js from '@eslint/js';
import svelte from 'eslint-plugin-svelte';
import globals from 'globals';
import ts from 'typescript-eslint';
import svelteConfig from '../../client/svelte.config.js';

export default ts.config(
  {
    ignores: ['**/node_modules/**', 'client/dist/**', 'coverage/**', '**/*.js', '**/*.mjs', '**/*.cjs', '.spanbeat/**'],
  },
  js.configs.recommended,
  ts.configs.strictTypeChecked,
  ...svelte.configs.recommended,
  {
    languageOptions: {
      globals: { ...globals.node },
      parserOptions: {
        project: [
          'server/core/tsconfig.json',
          'server/tsconfig.json',
          'simulator/tsconfig.json',
          'client/tsconfig.json',
          'test/tsconfig.json',
        ],
        tsconfigRootDir: new URL('../..', import.meta.url).pathname,
        extraFileExtensions: ['.svelte'],
      },
    },
    rules: {
      '@typescript-eslint/restrict-template-expressions': ['error', { allowNumber: true }],
      '@typescript-eslint/no-confusing-void-expression': ['error', { ignoreArrowShorthand: true }],
      '@typescript-eslint/no-unnecessary-condition': ['error', { allowConstantLoopConditions: true }],
      // Index access in hot loops: typed arrays are dense, and `noUncheckedIndexedAccess` asks for the mark.
      '@typescript-eslint/no-non-null-assertion': 'off',
      'no-console': 'error',
    },
  },
  {
    files: ['**/*.svelte', '**/*.svelte.ts'],
    languageOptions: { globals: globals.browser, parserOptions: { parser: ts.parser, svelteConfig } },
  },
  {
    files: ['server/core/**/*.ts'],
    rules: {
      'no-restricted-globals': [
        'error',
        'Date',
        'performance',
        'process',
        'setTimeout',
        'setInterval',
        'console',
        'fetch',
        'globalThis',
      ],
      'no-restricted-properties': [
        'error',
        { object: 'Math', property: 'random', message: 'the core is deterministic; take a generator as an argument' },
      ],
    },
  },
  { files: ['server/main.ts', 'test/tidy/**', 'test/bench/**'], rules: { 'no-console': 'off' } },
  { files: ['client/vite.config.ts'], extends: [ts.configs.disableTypeChecked] },
);
