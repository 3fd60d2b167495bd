/** The walls of the house: who may import whom. See DEVELOPERS.md, "Map". */
const shells = ['ingest', 'history', 'notify', 'exchange', 'web'];

module.exports = {
  forbidden: [
    { name: 'no-circular', severity: 'error', from: {}, to: { circular: true, dependencyTypesNot: ['type-only'] } },
    {
      name: 'core-is-pure',
      comment: 'The core imports itself and small numeric packages only.',
      severity: 'error',
      from: { path: '^server/core/' },
      to: { pathNot: ['^server/core/', 'node_modules/(typebox|fft\\.js|ml-matrix)/'] },
    },
    ...shells.map((shell) => ({
      name: `${shell}-stands-alone`,
      comment: 'Shells import the core, never each other; app.ts joins them.',
      severity: 'error',
      from: { path: `^server/${shell}/` },
      to: {
        path: '^(server|client|simulator|test)/',
        pathNot: ['^server/core/', `^server/${shell}/`, '^server/report\\.ts$', '^server/yaml\\.ts$'],
      },
    })),
    {
      name: 'client-sees-core-only',
      severity: 'error',
      from: { path: '^client/' },
      to: { path: '^(server|simulator|test)/', pathNot: '^server/core/' },
    },
    {
      name: 'simulator-sees-core-only',
      severity: 'error',
      from: { path: '^simulator/' },
      to: { path: '^(server|client|test)/', pathNot: '^server/core/' },
    },
    {
      name: 'only-tests-import-tests',
      severity: 'error',
      from: { pathNot: '^test/' },
      to: { path: '^test/' },
    },
    {
      name: 'only-main-imports-app',
      severity: 'error',
      from: { path: '^server/', pathNot: '^server/(main|app|command/.*)\\.ts$' },
      to: { path: '^server/app\\.ts$' },
    },
  ],
  options: {
    doNotFollow: { path: 'node_modules' },
    exclude: { path: 'client/dist' },
    tsPreCompilationDeps: true,
    tsConfig: { fileName: 'server/tsconfig.json' },
    enhancedResolveOptions: {
      exportsFields: ['exports'],
      conditionNames: ['import', 'node', 'default', 'types', 'svelte'],
    },
  },
};
