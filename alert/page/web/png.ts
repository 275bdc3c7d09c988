// A picture of what is seen as PNG: the SVG of the server, drawn by the browser.

/** Saves a blob under a name. */
export function keep(b: Blob, name: string): void {
  const a = document.createElement("a");
  a.href = URL.createObjectURL(b);
  a.download = name;
  a.click();
  setTimeout(() => URL.revokeObjectURL(a.href), 10000);
}

async function draw(address: string): Promise<Blob> {
  const r = await fetch(address);
  if (!r.ok) throw new Error(`answer ${r.status}`);
  const img = new Image();
  // As data, not as a blob: the policy of the page allows no other.
  img.src = `data:image/svg+xml;charset=utf-8,${encodeURIComponent(await r.text())}`;
  await img.decode();
  const c = document.createElement("canvas");
  c.width = img.naturalWidth * 2;
  c.height = img.naturalHeight * 2;
  c.getContext("2d")!.drawImage(img, 0, 0, c.width, c.height);
  return new Promise((done, fail) => c.toBlob((b) => (b ? done(b) : fail(new Error("no picture"))), "image/png"));
}

/** Adds a button for a PNG behind every link to an SVG that asks for one. */
export function pictures(): void {
  for (const a of document.querySelectorAll<HTMLAnchorElement>("a[data-png]")) {
    if (a.nextElementSibling instanceof HTMLButtonElement) continue;
    const b = document.createElement("button");
    b.type = "button";
    b.className = "link";
    b.textContent = "PNG";
    b.addEventListener("click", () => {
      b.disabled = true;
      draw(a.href).then((x) => keep(x, a.dataset.png!), (e: Error) => { b.textContent = `PNG: ${e.message}`; }).finally(() => { b.disabled = false; });
    });
    a.after(" ", b);
  }
}
