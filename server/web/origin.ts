const LOOPBACK_NAMES = new Set(['localhost', '127.0.0.1', '[::1]']);

export interface OriginRule {
  /** Origins beside the server's own, as browsers write them: `https://bridges.example`. */
  allowed: readonly string[];
  /** The server listens on this machine only, so no foreign name may lead to it (DNS rebinding). */
  loopback: boolean;
}

/**
 * Whether a request that acts or opens the live socket may come from this page. Programs that are not browsers send no
 * Origin and are let in: a cross-site page cannot leave it out.
 *
 * @param origin the Origin header (RFC 6454), undefined where absent
 * @param host the Host header
 * @example originAllowed('http://127.0.0.1:8600', '127.0.0.1:8600', { allowed: [], loopback: true }) // true
 */
export function originAllowed(origin: string | undefined, host: string | undefined, rule: OriginRule): boolean {
  if (origin === undefined) return true;
  if (rule.allowed.includes(origin)) return true;
  const parsed = URL.parse(origin);
  if (parsed === null || host === undefined || parsed.host !== withoutDefaultPort(host, parsed.protocol)) return false;
  return !rule.loopback || LOOPBACK_NAMES.has(parsed.hostname);
}

/** Browsers leave the scheme's own port out of an origin, and proxies may put it into Host. */
function withoutDefaultPort(host: string, protocol: string): string {
  return host.toLowerCase().replace(protocol === 'https:' ? /:443$/ : /:80$/, '');
}

export function isLoopback(host: string): boolean {
  return host === 'localhost' || host === '::1' || /^127(\.\d{1,3}){3}$/.test(host);
}
