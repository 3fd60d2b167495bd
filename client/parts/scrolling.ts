import type { Attachment } from 'svelte/attachments';

/** A box that scrolls sideways says so and can be reached by keyboard, but only while there is something to scroll to. */
export function scrolling(label: string): Attachment<HTMLElement> {
  return (box) => {
    const look = (): void => {
      if (box.scrollWidth > box.clientWidth) {
        box.tabIndex = 0;
        box.setAttribute('role', 'region');
        box.setAttribute('aria-label', `${label}, scrolls sideways`);
        // Written over the box by the style sheet, since many screens show no bar.
        box.setAttribute('data-scrolls', '');
      } else {
        for (const name of ['tabindex', 'role', 'aria-label', 'data-scrolls']) box.removeAttribute(name);
      }
    };
    const sizes = new ResizeObserver(look);
    sizes.observe(box);
    for (const child of box.children) sizes.observe(child);
    look();
    return () => sizes.disconnect();
  };
}
