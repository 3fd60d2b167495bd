/** Places beyond the first two, loaded together when one of them is first opened: readers go from one to the other. */
export { default as Alarms } from './Alarms.svelte';
export { default as Bridges } from './Bridges.svelte';
export { default as Passage } from './Passage.svelte';
export { default as Passages } from './Passages.svelte';
