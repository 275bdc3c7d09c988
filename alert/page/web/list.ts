// The list: strips come in blocks as they are scrolled to, and go when they are
// far away, so that thousands of loops cost no more than what is seen.
import { follow, get, swap, up } from "./live";
import { pictures } from "./png";

const rowsAtOnce = 40;

export function list(): void {
  document.body.classList.add("live");
  const strips = document.getElementById("strips")!;
  const need = document.getElementById("need")!;
  const form = document.getElementById("filter") as HTMLFormElement;
  const loaded = new Set<HTMLElement>();
  let asked = new AbortController();

  const from = (b: HTMLElement): string => b.dataset.from ?? "0";
  const fill = async (b: HTMLElement): Promise<void> => {
    loaded.add(b);
    b.classList.toggle("loading", b.childElementCount === 0);
    const q = new URLSearchParams(strips.dataset.query ?? "");
    if (from(b) !== "0") q.set("from", from(b));
    try {
      const html = await get(`${up}parts/rows?${q}`, asked.signal);
      if (loaded.has(b)) swap(b, html);
    } catch {
      loaded.delete(b); // tried again when it is seen again
    }
    b.classList.remove("loading");
  };
  const near = new IntersectionObserver((es) => {
    for (const e of es) {
      const b = e.target as HTMLElement;
      if (e.isIntersecting && !loaded.has(b)) void fill(b);
    }
  }, { rootMargin: "900px 0px" });
  const far = new IntersectionObserver((es) => {
    for (const e of es) {
      const b = e.target as HTMLElement;
      if (!e.isIntersecting && loaded.has(b) && !b.contains(document.activeElement)) {
        loaded.delete(b);
        b.replaceChildren();
      }
    }
  }, { rootMargin: "4000px 0px" });
  const blocks = (): void => {
    near.disconnect();
    far.disconnect();
    loaded.clear();
    const total = Number(strips.dataset.total);
    for (const b of strips.querySelectorAll<HTMLElement>(".block")) {
      b.style.setProperty("--rows", String(Math.max(0, Math.min(rowsAtOnce, total - Number(from(b))))));
      if (b.childElementCount > 0) loaded.add(b);
      near.observe(b);
      far.observe(b);
    }
  };
  blocks();

  const refresh = (): void => {
    get(`${up}parts/need`).then((h) => swap(need, h)).catch(() => { /* the lost line says it */ });
    for (const b of loaded) void fill(b);
  };

  // Filters without a reload: the same view is asked for, and its list taken.
  const narrow = async (query: string, push: boolean): Promise<void> => {
    asked.abort();
    asked = new AbortController();
    const address = query ? `?${query}` : "./";
    if (push) history.pushState(null, "", address);
    else history.replaceState(null, "", address);
    strips.setAttribute("aria-busy", "true");
    try {
      const doc = new DOMParser().parseFromString(await get(address, asked.signal), "text/html");
      const next = doc.getElementById("strips")!;
      strips.dataset.total = next.dataset.total;
      strips.dataset.query = next.dataset.query;
      strips.replaceChildren(...next.childNodes);
      document.getElementById("h-watch")!.textContent = doc.getElementById("h-watch")!.textContent;
      const spans = form.querySelector(".spans")!;
      swap(spans, doc.querySelector("#filter .spans")!.innerHTML);
      (form.elements.namedItem("span") as HTMLInputElement).value = (doc.querySelector('#filter [name="span"]') as HTMLInputElement).value;
      blocks();
      pictures();
    } catch (e) {
      if ((e as Error).name === "AbortError") return;
    }
    strips.removeAttribute("aria-busy");
  };
  const query = (): string => {
    const q = new URLSearchParams();
    for (const [k, v] of new FormData(form)) if (v !== "" && !(k === "span" && v === "12")) q.set(k, String(v));
    return q.toString();
  };
  let wait = 0;
  form.addEventListener("input", () => {
    clearTimeout(wait);
    wait = window.setTimeout(() => void narrow(query(), false), 200);
  });
  form.addEventListener("submit", (e) => {
    e.preventDefault();
    void narrow(query(), true);
  });
  form.addEventListener("click", (e) => {
    const a = (e.target as Element).closest<HTMLAnchorElement>(".spans a");
    if (!a || e.ctrlKey || e.metaKey || e.shiftKey) return;
    e.preventDefault();
    void narrow(a.search.slice(1), true);
  });
  window.addEventListener("popstate", () => location.reload());
  document.addEventListener("keydown", (e) => {
    if (e.key === "/" && !(e.target instanceof Element && e.target.closest("input,select,textarea"))) {
      e.preventDefault();
      form.querySelector<HTMLInputElement>("[type=search]")!.focus();
    }
  });
  follow(() => "", refresh);
  window.setInterval(() => { if (!document.hidden) refresh(); }, 60000);
}
