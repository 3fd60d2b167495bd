import { mount } from 'svelte';
import App from './App.svelte';
import './style/base.css';
import { theme } from './theme.svelte.ts';

/** Type for canvases must be there before the first stroke: a canvas does not draw itself again when it comes. */
const FONTS_WAIT_MS = 800;
const CANVAS_TYPE = [
  '400 12px "Barlow Semi Condensed"',
  '500 12px "Barlow Semi Condensed"',
  '600 12px "Barlow Semi Condensed"',
];

theme.apply();
const sheet = document.getElementById('sheet');
if (!sheet) throw new Error('the page has no element to draw the sheet in');
const late = new Promise((resolve) => setTimeout(resolve, FONTS_WAIT_MS));
await Promise.race([late, Promise.allSettled(CANVAS_TYPE.map((font) => document.fonts.load(font)))]);
mount(App, { target: sheet });
