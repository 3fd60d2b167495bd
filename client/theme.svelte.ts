/** Paper or night: the reader's choice, kept in this browser; the system's where none was made. */
export type Theme = 'paper' | 'night';

const KEY = 'spanbeat.theme';
const dark = matchMedia('(prefers-color-scheme: dark)');

class ThemeChoice {
  chosen = $state.raw<Theme | null>(readChoice());
  #system = $state.raw<Theme>(dark.matches ? 'night' : 'paper');
  inForce = $derived<Theme>(this.chosen ?? this.#system);

  /** Puts the theme on the page and follows the system while nothing was chosen. */
  apply(): void {
    dark.addEventListener('change', (event) => {
      this.#system = event.matches ? 'night' : 'paper';
      this.#show();
    });
    this.#show();
  }

  toggle(): void {
    this.chosen = this.inForce === 'paper' ? 'night' : 'paper';
    try {
      localStorage.setItem(KEY, this.chosen);
    } catch {
      // Storage may be switched off; the choice then lasts as long as the page.
    }
    this.#show();
  }

  #show(): void {
    document.documentElement.dataset['theme'] = this.inForce;
  }
}

function readChoice(): Theme | null {
  try {
    const kept = localStorage.getItem(KEY);
    return kept === 'paper' || kept === 'night' ? kept : null;
  } catch {
    return null;
  }
}

export const theme = new ThemeChoice();
