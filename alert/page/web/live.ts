// The connection to the daemon: what it says every two seconds, and what the
// page shows when it falls silent.

export interface Pulse {
  judged: number; cannot_judge: number; not_normal: number; held: number; catching_up: number;
  sources: number; alive: number; age: string; stale: boolean; now: string; now_ms: number; revision: number;
}

export interface Fresh { t: number[]; pv: (number | null)[]; sp: (number | null)[]; op: (number | null)[]; pos?: (number | null)[]; ff?: (number | null)[] }

export const up = document.body.dataset.up ?? "";

let skew = document.body.dataset.now ? Number(document.body.dataset.now) - Date.now() : 0;

/** Now by the clock of the box, ms: the clock of this screen may be wrong. */
export function boxNow(): number {
  return Date.now() + skew;
}

/** Silence after which the page says so, ms: three pulses and a little. */
const silence = 7000;

function put(key: string, text: string): void {
  const el = document.querySelector(`[data-k="${key}"]`);
  if (el && el.textContent !== text) el.textContent = text;
}

function show(p: Pulse): void {
  put("judged", String(p.judged));
  put("cannot_judge", String(p.cannot_judge));
  put("not_normal", String(p.not_normal));
  put("held", String(p.held));
  put("catching_up", String(p.catching_up));
  put("now", p.now);
  put("age", `${p.age} · ${p.alive} of ${p.sources} sources alive`);
  document.querySelector('[data-k="age"]')?.classList.toggle("stale", p.stale);
  document.querySelector('[data-k="catching"]')?.toggleAttribute("hidden", p.catching_up === 0);
}

function span(ms: number): string {
  const s = Math.round(ms / 1000);
  return s < 120 ? `${s} s` : s < 7200 ? `${Math.round(s / 60)} min` : `${Math.round(s / 3600)} h`;
}

/**
 * Follows the daemon. query is called at every connection; changed when an
 * episode changed, and after a silence, when anything may have.
 */
export function follow(query: () => string, changed: () => void, fresh?: (f: Fresh) => void): void {
  const lost = document.getElementById("lost")!;
  let source: EventSource | null = null;
  let heard = Date.now(), revision = -1, since = "", retry = 0;

  const alive = (): void => {
    heard = Date.now();
    if (!lost.hidden) {
      lost.hidden = true;
      document.body.classList.remove("lost");
      changed();
    }
  };
  const open = (): void => {
    source?.close();
    source = new EventSource(`${up}api/stream${query()}`);
    source.addEventListener("pulse", (e) => {
      const p = JSON.parse((e as MessageEvent<string>).data) as Pulse;
      alive();
      skew = p.now_ms - Date.now();
      show(p);
      since = p.now;
      if (revision >= 0 && p.revision !== revision) changed();
      revision = p.revision;
    });
    if (fresh) source.addEventListener("fresh", (e) => fresh(JSON.parse((e as MessageEvent<string>).data) as Fresh));
  };
  window.setInterval(() => {
    if (document.hidden) return;
    const quiet = Date.now() - heard;
    if (quiet < silence) return;
    // The text changes by itself every second: readers hear the beginning only.
    const text = `The page lost its connection ${span(quiet)} ago. What you see is old${since ? `: ${since}` : ""}. It tries again by itself.`;
    if (lost.hidden) lost.hidden = false;
    lost.setAttribute("aria-live", "off");
    lost.textContent = text;
    document.body.classList.add("lost");
    if (source?.readyState === EventSource.CLOSED && Date.now() > retry) {
      retry = Date.now() + 5000;
      open();
    }
  }, 1000);
  // A page nobody sees asks for nothing.
  document.addEventListener("visibilitychange", () => {
    if (document.hidden) {
      source?.close();
      source = null;
    } else {
      heard = Date.now();
      open();
      changed();
    }
  });
  open();
}

/** Puts HTML of our own server in place and keeps the focus where it was. */
export function swap(el: Element, html: string): void {
  const held = document.activeElement;
  const inside = held && el.contains(held) ? held.getAttribute("href") ?? held.id : null;
  el.innerHTML = html;
  if (inside === null) return;
  for (const a of el.querySelectorAll<HTMLElement>("a,[id]")) {
    if (a.getAttribute("href") === inside || a.id === inside) {
      a.focus({ preventScroll: true });
      return;
    }
  }
}

/** Gets a view of our own as text; throws where the answer is an error. */
export async function get(url: string, signal?: AbortSignal): Promise<string> {
  const r = await fetch(url, { headers: { Accept: "text/html" }, ...(signal ? { signal } : {}) });
  if (r.status === 401) location.reload();
  if (!r.ok) throw new Error(`${r.status} of ${url}`);
  return r.text();
}
