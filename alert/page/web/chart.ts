// Two plots on one time axis: PV and SP over OP, with everything that was found
// drawn in.
import uPlot from "./vendor/uplot/uPlot.js";

export interface Overlay { name: string; on: string; shown: boolean; t: number[]; low: (number | null)[]; high?: (number | null)[]; dots?: boolean }
export interface Run { what: string; word: string; from: number; to: number }
export interface Found { kind: string; class: string; label: string; from: number; to: number }
export interface Level { on: string; value: number; label: string }
export interface Trend {
  loop: string; unit: string; from: number; to: number; bucket_ms: number; newest: number;
  t: number[]; pv: (number | null)[]; sp: (number | null)[]; op: (number | null)[]; pos?: (number | null)[]; ff?: (number | null)[];
  runs?: Run[]; changes?: { at: number; word: string }[]; overlays?: Overlay[]; troubles?: Found[]; lines?: Level[]; pv_scale: [number | null, number | null];
}

const zone = ((): string | undefined => {
  const z = document.body.dataset.zone;
  try {
    new Intl.DateTimeFormat("en-GB", { timeZone: z });
    return z;
  } catch {
    return undefined;
  }
})();

const forms = new Map<string, Intl.DateTimeFormat>();
function form(o: Intl.DateTimeFormatOptions): Intl.DateTimeFormat {
  const k = JSON.stringify(o);
  let f = forms.get(k);
  if (!f) forms.set(k, (f = new Intl.DateTimeFormat("en-GB", { ...o, timeZone: zone, hourCycle: "h23" })));
  return f;
}

/** A moment on the site's clock. */
export function siteTime(ms: number, seconds = true): string {
  return form({ day: "numeric", month: "short", hour: "2-digit", minute: "2-digit", ...(seconds ? { second: "2-digit" } : {}) }).format(ms).replace(",", "");
}

function tick(ms: number, span: number): string {
  if (span < 600e3) return form({ hour: "2-digit", minute: "2-digit", second: "2-digit" }).format(ms);
  const hour = form({ hour: "2-digit", minute: "2-digit" }).format(ms);
  if (span < 36 * 3600e3) return hour;
  const day = form({ day: "numeric", month: "short" }).format(ms);
  return hour === "00:00" ? day : `${day} ${hour}`;
}

export function sig(v: number | null | undefined, n = 4): string {
  return v === null || v === undefined ? "–" : String(Number(v.toPrecision(n)));
}

/** Unit of OP, with a space before it; empty where it is not per cent. */
const percent = document.body.dataset.op ? ` ${document.body.dataset.op}` : "";

interface Colours { [k: string]: string }
function colours(): Colours {
  const s = getComputedStyle(document.body);
  const get = (k: string): string => s.getPropertyValue(`--${k}`).trim();
  return Object.fromEntries(["ink", "soft", "line", "trace", "paper", "card", "band", "now", "morning", "note", "past", "now-t", "morning-t", "note-t"].map((k) => [k, get(k)]));
}

const font = "12px system-ui, 'Segoe UI', sans-serif";

export class Chart {
  private plots: uPlot[] = [];
  private trend: Trend | null = null;
  private c = colours();
  readonly shown = new Map<string, boolean>();

  constructor(private box: HTMLElement, private unit: string, private pick: (from: number, to: number) => void, private point: (text: string) => void) {
    const again = (): void => {
      this.c = colours();
      for (const p of this.plots) p.redraw(false);
    };
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", again);
    new ResizeObserver(() => this.size()).observe(box);
  }

  /** Shows a trend; from and to are the time axis, ms. */
  show(t: Trend, from: number, to: number): void {
    this.trend = t;
    for (const o of t.overlays ?? []) if (!this.shown.has(o.name)) this.shown.set(o.name, o.shown);
    if (this.plots.length === 0) this.make();
    this.plots[0]!.setData([t.t, t.pv, t.sp] as uPlot.AlignedData, false);
    const none = t.pos && t.ff ? [] : t.t.map(() => null);
    this.plots[1]!.setData([t.t, t.pos ?? none, t.ff ?? none, t.op] as uPlot.AlignedData, false);
    this.range(from, to);
  }

  range(from: number, to: number): void {
    for (const p of this.plots) p.batch(() => p.setScale("x", { min: from, max: to }));
  }

  redraw(): void {
    for (const p of this.plots) p.redraw(false);
  }

  /** Both plots as one picture. */
  picture(title: string): HTMLCanvasElement {
    const [a, b] = this.plots.map((p) => p.ctx.canvas) as [HTMLCanvasElement, HTMLCanvasElement];
    const out = document.createElement("canvas");
    const r = devicePixelRatio;
    out.width = a.width;
    out.height = a.height + b.height + 30 * r;
    const g = out.getContext("2d")!;
    g.fillStyle = this.c.card!;
    g.fillRect(0, 0, out.width, out.height);
    g.fillStyle = this.c.ink!;
    g.font = `600 ${13 * r}px system-ui, sans-serif`;
    g.fillText(title, 10 * r, 20 * r);
    g.drawImage(a, 0, 30 * r);
    g.drawImage(b, 0, 30 * r + a.height);
    return out;
  }

  private size(): void {
    const w = this.box.clientWidth;
    if (w < 50) return;
    this.plots.forEach((p, i) => p.setSize({ width: w, height: this.height(i) }));
  }

  private height(i: number): number {
    const small = innerWidth < 720;
    return i === 0 ? (small ? 210 : 290) : small ? 150 : 190;
  }

  private make(): void {
    const col = (k: string) => (): string => this.c[k]!;
    const axis = (size: number): uPlot.Axis => ({ stroke: col("soft"), grid: { stroke: col("line"), width: 0.6 }, ticks: { stroke: col("line"), width: 0.6 }, font, size });
    const base = (i: number): uPlot.Options => ({
      width: this.box.clientWidth, height: this.height(i), ms: 1, legend: { show: false }, tzDate: (ts) => (zone ? uPlot.tzDate(new Date(ts), zone) : new Date(ts)),
      padding: [18, 12, i === 0 ? 0 : null, 0],
      cursor: { sync: { key: "loop", setSeries: false, filters: { pub: (type) => type === "mousemove" || type === "mouseleave", sub: () => true } }, drag: { x: true, y: false, setScale: false }, points: { size: 6 } },
      scales: { x: { time: true }, y: { range: (u, lo, hi) => this.bounds(u, i, lo, hi) } },
      axes: [{ ...axis(i === 0 ? 8 : 34), show: true, values: (u, v) => (i === 0 ? v.map(() => "") : v.map((x) => tick(x, (u.scales.x!.max ?? 0) - (u.scales.x!.min ?? 0)))), space: 80 },
        { ...axis(58), values: (_u, v, _a, _s, by) => v.map((x) => x.toFixed(Math.min(6, Math.max(0, -Math.floor(Math.log10(by) + 1e-9) + (String(Number(by.toPrecision(2))).replace(/[^1-9]/g, "").length > 1 ? 1 : 0))))) }],
      series: [{}],
      hooks: {
        drawClear: [(u) => this.under(u, i === 0)], draw: [(u) => this.over(u, i === 0 ? "pv" : "op", i)],
        setSelect: [(u) => {
          if (u.select.width < 6) return;
          const a = u.posToVal(u.select.left, "x"), b = u.posToVal(u.select.left + u.select.width, "x");
          u.setSelect({ left: 0, top: 0, width: 0, height: 0 }, false);
          this.pick(Math.round(a), Math.round(b));
        }],
        setCursor: [(u) => { if (i === 0) this.read(u); }],
      },
    });
    const pv = base(0), op = base(1);
    pv.series.push({ label: "PV", stroke: col("ink"), width: 1.2, points: { show: false } }, { label: "SP", stroke: col("note"), width: 1.4, dash: [6, 4], points: { show: false } });
    // The position lies on the scale of OP; a feed-forward has a scale of its own.
    op.series.push({ label: "position", stroke: col("trace"), width: 2.4, points: { show: false } },
      { label: "feed-forward", scale: "ff", stroke: col("soft"), width: 1.4, dash: [1, 4], points: { show: false } }, { label: "OP", stroke: col("ink"), width: 1.2, points: { show: false } });
    op.scales!.ff = { range: (_u, lo, hi) => (lo === null || hi === null ? [0, 1] : [lo - Math.max((hi - lo) * 0.08, 1e-9), hi + Math.max((hi - lo) * 0.08, 1e-9)]) };
    for (const o of [pv, op]) this.plots.push(new uPlot(o, [[]] as unknown as uPlot.AlignedData, this.box));
  }

  /** Keeps noise small: a span of 2 % of range of PV, 5 % of OP at least. */
  private bounds(_u: uPlot, i: number, lo: number | null, hi: number | null): [number, number] {
    if (lo === null || hi === null) return [0, 1];
    const s = this.trend?.pv_scale;
    const full = i === 0 && s && s[0] !== null && s[1] !== null ? Math.abs(s[1] - s[0]) * 0.02 : 5;
    const pad = Math.max((hi - lo) * 0.08, (full - (hi - lo)) / 2, 1e-9);
    return [lo - pad, hi + pad];
  }

  private read(u: uPlot): void {
    const i = u.cursor.idx, t = this.trend;
    if (i === null || i === undefined || !t || t.t[i] === undefined) return this.point("");
    const at = t.t[i]!;
    const unit = this.unit ? ` ${this.unit}` : "";
    const runs = (t.runs ?? []).filter((r) => r.from <= at && at <= r.to).map((r) => r.word);
    const near = (t.to - t.from) / 150;
    for (const ch of t.changes ?? []) if (Math.abs(ch.at - at) < near) runs.push(`${siteTime(ch.at)}: ${ch.word}`);
    this.point(`${siteTime(at)} (${new Date(at).toISOString().slice(11, 19)} UTC) · PV ${sig(t.pv[i])}${unit} · SP ${sig(t.sp[i])}${unit} · OP ${sig(t.op[i])}${percent}${t.pos ? ` · position ${sig(t.pos[i])}${percent}` : ""}${t.ff ? ` · feed-forward ${sig(t.ff[i])}` : ""}${runs.length ? ` · ${[...new Set(runs)].join(", ")}` : ""}`);
  }

  private x(u: uPlot, ms: number): number {
    const b = u.bbox;
    return Math.max(b.left, Math.min(b.left + b.width, u.valToPos(ms, "x", true)));
  }

  private under(u: uPlot, words: boolean): void {
    const t = this.trend, g = u.ctx, b = u.bbox;
    if (!t) return;
    g.save();
    for (const r of t.runs ?? []) {
      const x0 = this.x(u, r.from), w = Math.max(1, this.x(u, r.to) - x0);
      if (r.what === "inactive" || r.what === "hidden") {
        this.hatch(g, x0, b.top, w, b.height);
        g.font = `${12 * devicePixelRatio}px system-ui, sans-serif`;
        if (words && g.measureText(r.word).width + 10 < w) {
          g.fillStyle = this.c.soft!;
          g.textAlign = "left";
          g.fillText(r.word, x0 + 5 * devicePixelRatio, b.top + b.height - 6 * devicePixelRatio);
        }
      } else if (r.what === "lost") {
        g.fillStyle = this.c.soft!;
        g.fillRect(x0, b.top + b.height - 3 * devicePixelRatio, w, 3 * devicePixelRatio);
      }
      if (r.what === "gap") {
        g.strokeStyle = this.c.trace!;
        g.setLineDash([4, 4]);
        g.strokeRect(x0, b.top, w, b.height);
        g.setLineDash([]);
      }
    }
    for (const f of t.troubles ?? []) {
      const x0 = this.x(u, f.from), w = this.x(u, f.to || Number.MAX_SAFE_INTEGER) - x0;
      g.globalAlpha = 0.08;
      g.fillStyle = this.c[f.class] ?? this.c.past!;
      g.fillRect(x0, b.top, w, b.height);
    }
    g.restore();
  }

  /** Text with a rim of the paper's colour, so that it is read over a trace. */
  private label(g: CanvasRenderingContext2D, text: string, x: number, y: number): void {
    g.save();
    g.strokeStyle = this.c.card!;
    g.lineWidth = 4 * devicePixelRatio;
    g.lineJoin = "round";
    g.strokeText(text, x, y);
    g.restore();
    g.fillText(text, x, y);
  }

  private hatch(g: CanvasRenderingContext2D, x: number, y: number, w: number, h: number): void {
    g.save();
    g.beginPath();
    g.rect(x, y, w, h);
    g.clip();
    g.strokeStyle = this.c.trace!;
    g.globalAlpha = 0.45;
    g.beginPath();
    const step = 9 * devicePixelRatio;
    for (let k = x - h; k < x + w; k += step) {
      g.moveTo(k, y + h);
      g.lineTo(k + h, y);
    }
    g.stroke();
    g.restore();
  }

  private over(u: uPlot, on: string, i: number): void {
    const t = this.trend, g = u.ctx, b = u.bbox, r = devicePixelRatio;
    if (!t) return;
    g.save();
    g.setLineDash([]);
    g.beginPath();
    g.rect(b.left, b.top, b.width, b.height);
    g.clip();
    g.font = `${12 * r}px system-ui, sans-serif`;
    for (const o of t.overlays ?? []) if (o.on === on && this.shown.get(o.name)) this.overlay(u, o);
    for (const l of t.lines ?? []) {
      if (l.on !== on) continue;
      const y = u.valToPos(l.value, "y", true);
      if (y < b.top - 1 || y > b.top + b.height + 1) continue;
      g.strokeStyle = g.fillStyle = this.c.soft!;
      g.setLineDash([2 * r, 5 * r]);
      g.beginPath();
      g.moveTo(b.left, y);
      g.lineTo(b.left + b.width, y);
      g.stroke();
      g.setLineDash([]);
      g.textAlign = "right";
      this.label(g, l.label, b.left + b.width - 4 * r, y + (y < b.top + 16 * r ? 14 : -4) * r);
    }
    // A limit that is met, and wind-up, along the top of OP.
    if (on === "op") {
      for (const run of t.runs ?? []) {
        if (run.what !== "limit" && run.what !== "overhang") continue;
        g.fillStyle = run.what === "overhang" ? this.c.morning! : this.c.soft!;
        g.fillRect(this.x(u, run.from), b.top + (run.what === "overhang" ? 5 : 0) * r, Math.max(2, this.x(u, run.to) - this.x(u, run.from)), 4 * r);
      }
    }
    // What people changed: a small wedge at the foot of OP; the readout says it.
    if (on === "op") {
      g.fillStyle = this.c.note!;
      for (const ch of t.changes ?? []) {
        const x = u.valToPos(ch.at, "x", true), y = b.top + b.height;
        g.beginPath();
        g.moveTo(x, y - 9 * r);
        g.lineTo(x + 4 * r, y);
        g.lineTo(x - 4 * r, y);
        g.fill();
      }
    }
    g.restore();
    g.save();
    g.setLineDash([]);
    g.font = `600 ${12 * r}px system-ui, sans-serif`;
    (t.troubles ?? []).forEach((f, k) => {
      const v = u.valToPos(f.from, "x", true);
      if (v >= b.left && v <= b.left + b.width) {
        g.strokeStyle = this.c[f.class] ?? this.c.past!;
        g.lineWidth = 1.4 * r;
        g.beginPath();
        g.moveTo(v, b.top);
        g.lineTo(v, b.top + b.height);
        g.stroke();
      }
      if (i !== 0) return;
      const x = Math.max(v, b.left), right = x + g.measureText(f.label).width + 8 * r > b.left + b.width;
      if (x > b.left + b.width || (f.to && this.x(u, f.to) <= b.left)) return;
      g.fillStyle = this.c[`${f.class}-t`] ?? this.c.soft!;
      g.textAlign = right ? "right" : "left";
      this.label(g, f.label, x + (right ? -6 : 6) * r, b.top + (13 + (k % 4) * 15) * r);
    });
    g.fillStyle = this.c.soft!;
    g.font = `${12 * r}px system-ui, sans-serif`;
    g.textAlign = "left";
    g.fillText(i === 0 ? `PV (full), SP (dashed)${this.unit ? `  ${this.unit}` : ""}` : `OP ${percent}${t.pos ? ", position (grey)" : ""}${t.ff ? ", feed-forward (dotted, own scale)" : ""}`, b.left, b.top - 6 * r);
    g.restore();
  }

  private overlay(u: uPlot, o: Overlay): void {
    const g = u.ctx, r = devicePixelRatio;
    const at = (k: number, v: number | null | undefined): [number, number] | null =>
      v === null || v === undefined ? null : [u.valToPos(o.t[k]!, "x", true), u.valToPos(v, "y", true)];
    const trace = (vs: (number | null)[], back: boolean): void => {
      let down = back;
      for (let j = 0; j < vs.length; j++) {
        const k = back ? vs.length - 1 - j : j;
        const p = at(k, vs[k]);
        if (p) down ? g.lineTo(p[0], p[1]) : g.moveTo(p[0], p[1]);
        down = back || p !== null;
      }
    };
    g.save();
    g.strokeStyle = g.fillStyle = o.name === "noise level" ? this.c.trace! : this.c["now-t"]!;
    g.lineWidth = r;
    if (o.dots) {
      o.t.forEach((_, k) => {
        const p = at(k, o.low[k]);
        if (!p) return;
        g.beginPath();
        g.arc(p[0], p[1], 3 * r, 0, 7);
        g.stroke();
      });
    } else if (o.name === "noise level" && o.high) {
      g.globalAlpha = 0.25;
      g.beginPath();
      trace(o.low, false);
      trace(o.high, true);
      g.fill();
    } else {
      for (const vs of [o.low, o.high]) {
        if (!vs) continue;
        g.beginPath();
        trace(vs, false);
        g.stroke();
      }
    }
    g.restore();
  }
}
