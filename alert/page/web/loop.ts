// A loop: the chart over a span that stands in the address, so that back,
// forward and a copied link work.
import { boxNow, follow, get, swap, up } from "./live";
import { keep } from "./png";
import { Chart, siteTime, type Trend } from "./chart";

const body = document.body.dataset;
const api = `${up}api/loops/${body.loop}/trend`;
const figure = document.getElementById("trend")!;
const unit = body.unit ?? "";

interface Span { from: number; to: number; hours: number }
let span: Span = { from: Number(body.from), to: Number(body.to), hours: Number(body.hours) };
let trend: Trend | null = null;
let asked = new AbortController();

const box = document.createElement("div");
box.className = "plot";
const readout = document.createElement("p");
readout.className = "readout";
const tools = document.createElement("div");
tools.className = "lay";
const problem = document.createElement("p");
problem.className = "bad";
problem.setAttribute("role", "alert");

const chart = new Chart(box, unit, (from, to) => go({ from, to, hours: 0 }), (text) => { readout.textContent = text || hint; });
const hint = "Drag over the trend to look closer. With the keyboard: left, right, plus, minus, Home for now.";

function query(s: Span): string {
  return s.hours > 0 ? `hours=${s.hours}` : `from=${s.from}&to=${s.to}`;
}

function now(s: Span): Span {
  return s.hours > 0 ? { from: boxNow() - s.hours * 3600e3, to: boxNow(), hours: s.hours } : s;
}

/** Goes to a span and writes it into the address. */
function go(s: Span, push = true): void {
  span = now({ ...s, from: Math.max(0, Math.round(s.from)), to: Math.round(s.to) });
  if (push) history.pushState(null, "", `?${query(span)}`);
  if (trend) chart.range(span.from, span.to);
  void load();
  void parts(["spans", "xy", "changes"]);
}

function move(by: number): void {
  const w = span.to - span.from;
  const to = Math.min(span.to + by * w, boxNow());
  go({ from: to - w, to, hours: 0 });
}

function zoom(by: number): void {
  const mid = span.hours > 0 ? span.to : (span.from + span.to) / 2;
  const w = Math.max(10e3, Math.min((span.to - span.from) * by, 400 * 86400e3));
  if (span.hours > 0) go({ from: 0, to: 0, hours: Number((w / 3600e3).toPrecision(4)) });
  else go({ from: mid - w / 2, to: mid + w / 2, hours: 0 });
}

async function load(): Promise<void> {
  asked.abort();
  asked = new AbortController();
  const points = Math.max(200, Math.min(1500, Math.round(box.clientWidth || 800)));
  figure.setAttribute("aria-busy", "true");
  try {
    const r = await fetch(`${api}?${query(span)}&points=${points}`, { signal: asked.signal });
    if (!r.ok) throw new Error(await r.text());
    trend = (await r.json()) as Trend;
    if (!box.isConnected) figure.replaceChildren(readout, box, tools, problem);
    problem.textContent = "";
    show();
    toggles(trend);
    exports();
  } catch (e) {
    if ((e as Error).name === "AbortError") return;
    problem.textContent = `The trend could not be read: ${(e as Error).message}`;
    if (!problem.isConnected) figure.append(problem);
  }
  figure.removeAttribute("aria-busy");
}

function show(): void {
  chart.show(trend!, span.from, span.to);
  figure.dataset.rows = String(trend!.t.length);
}

let made = "";
function toggles(t: Trend): void {
  const names = [...new Set((t.overlays ?? []).map((o) => o.name))];
  const key = names.join("|");
  if (made === key && tools.childElementCount) return;
  made = key;
  const button = (text: string, label: string, f: () => void): HTMLButtonElement => {
    const b = document.createElement("button");
    b.type = "button";
    b.textContent = text;
    b.setAttribute("aria-label", label);
    b.addEventListener("click", f);
    return b;
  };
  tools.replaceChildren(button("← earlier", "earlier", () => move(-0.5)), button("later →", "later", () => move(0.5)), button("closer", "look closer", () => zoom(0.5)),
    button("wider", "look wider", () => zoom(2)), button("now", "back to now", () => go({ from: 0, to: 0, hours: (span.to - span.from) / 3600e3 })));
  for (const n of names) {
    const l = document.createElement("label"), c = document.createElement("input");
    c.type = "checkbox";
    c.checked = chart.shown.get(n) ?? false;
    c.addEventListener("change", () => {
      chart.shown.set(n, c.checked);
      chart.redraw();
    });
    l.append(c, ` ${n}`);
    tools.append(l);
  }
}

function exports(): void {
  const q = `?${query(span)}`;
  for (const a of document.querySelectorAll<HTMLAnchorElement>("[data-save]")) {
    a.href = `${body.loop}/trend.${a.dataset.save}${q}${a.dataset.save === "svg" ? "&save=1" : ""}`;
  }
  const word = document.getElementById("spanword");
  if (word) {
    word.textContent = `${siteTime(span.from, false)} – ${siteTime(span.to, false)}`;
    word.title = `${new Date(span.from).toISOString()} to ${new Date(span.to).toISOString()}`;
  }
}

/** Takes parts of this view anew from the server; forms are left alone. */
async function parts(ids: string[]): Promise<void> {
  try {
    const doc = new DOMParser().parseFromString(await get(`${location.pathname}?${query(span)}`), "text/html");
    for (const id of ids) {
      const el = document.getElementById(id), next = doc.getElementById(id);
      if (el && next && el.innerHTML !== next.innerHTML) swap(el, next.innerHTML);
    }
    exports();
  } catch { /* the lost line says it */ }
}

document.getElementById("spans")!.addEventListener("click", (e) => {
  const a = (e.target as Element).closest<HTMLAnchorElement>("a");
  if (!a || e.ctrlKey || e.metaKey || e.shiftKey) return;
  e.preventDefault();
  go(fromAddress(a.search));
});

function fromAddress(search: string): Span {
  const q = new URLSearchParams(search);
  if (q.has("from")) return { from: Number(q.get("from")), to: Number(q.get("to") ?? boxNow()), hours: 0 };
  return { from: 0, to: 0, hours: Number(q.get("hours") ?? (Number(body.hours) || 4)) };
}
// The first address may have no span: it is written in, so that back finds it.
history.replaceState(null, "", `?${query(span)}${location.hash}`);
window.addEventListener("popstate", () => go(fromAddress(location.search), false));

figure.tabIndex = 0;
figure.setAttribute("aria-label", `Trend of ${body.name}. Left and right move, plus and minus change the span, Home goes to now.`);
figure.setAttribute("role", "group");
figure.addEventListener("keydown", (e) => {
  const does: Record<string, () => void> = { ArrowLeft: () => move(-0.25), ArrowRight: () => move(0.25), "+": () => zoom(0.5), "-": () => zoom(2), Home: () => go({ from: 0, to: 0, hours: (span.to - span.from) / 3600e3 }) };
  const f = does[e.key];
  if (!f || e.target !== figure) return;
  e.preventDefault();
  f();
});
let swept = 0;
box.addEventListener("wheel", (e) => {
  // Sideways moves in time; up and down belong to the page unless Ctrl is held.
  if (e.ctrlKey) {
    e.preventDefault();
    zoom(e.deltaY > 0 ? 1.25 : 0.8);
  } else if (Math.abs(e.deltaX) > Math.abs(e.deltaY)) {
    e.preventDefault();
    swept += e.deltaX / (box.clientWidth || 800);
    if (Math.abs(swept) > 0.1) {
      move(swept);
      swept = 0;
    }
  }
}, { passive: false });

const save = document.createElement("button");
save.type = "button";
save.className = "link";
save.textContent = "PNG";
save.addEventListener("click", () => {
  chart.picture(`${body.name} · ${siteTime(span.from, false)} – ${siteTime(span.to, false)}`).toBlob((b) => {
    if (b) keep(b, `${(body.name ?? "loop").replace(/[^\w.-]+/g, "_")}.png`);
  });
});
document.querySelector(".exports")?.append(" ", save);

readout.textContent = hint;
await load();
follow(() => `?loop=${body.loop}${trend?.newest ? `&after=${trend.newest}` : ""}`, () => void parts(["said", "found", "now", "journal"]), (f) => {
  if (!trend || span.hours === 0) return; // who looks at the past is left in peace
  for (let i = 0; i < f.t.length; i++) {
    if (f.t[i]! <= (trend.t[trend.t.length - 1] ?? 0)) continue;
    trend.t.push(f.t[i]!);
    trend.pv.push(f.pv[i] ?? null);
    trend.sp.push(f.sp[i] ?? null);
    trend.op.push(f.op[i] ?? null);
    trend.pos?.push(f.pos?.[i] ?? null);
    trend.ff?.push(f.ff?.[i] ?? null);
    trend.newest = f.t[i]!;
  }
  span = now(span);
  // What has left the view goes; when too much has come in, it is thinned anew.
  let gone = 0;
  while (gone < trend.t.length && trend.t[gone]! < span.from - (span.to - span.from) / 10) gone++;
  if (gone > 200) for (const c of [trend.t, trend.pv, trend.sp, trend.op, trend.pos, trend.ff]) c?.splice(0, gone);
  if (trend.t.length > 6000) void load();
  else show();
  exports();
});
window.setInterval(() => { if (!document.hidden) void parts(["now", "xy"]); }, 60000);
