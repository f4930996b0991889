// The bench: where the seed is, and everything that follows from it; and the rest of the page.

class Bench {
  constructor(arrays, maps) {
    Object.assign(this, arrays);
    this.maps = maps;
    this.values = new Float32Array(study.voxels);
    this.reported = new Float32Array(study.voxels);
    maps.fill(this.reported, [{ row: 0, share: 1 }]);
    this.reportedClasses = new Int8Array(study.voxels);
    this.regionSizes = new Float64Array(regions.length);
    for (const label of this.regionOf) if (label) this.regionSizes[label - 1] += 1;
    this.seed = [...study.at];
    this.radius = study.radius;
    this.look = [...study.at];
    this.reach = Math.max(...placements.map((one) => one.distance), 1e-3);
    this.top = cutOfRank(this.reported, Math.max(1, Math.round(this.reported.length / 1000)));
    this.#startCut();
    this.colours();
    this.slices = Object.keys(AXES).map((kind) => new Slice(kind, this));
    this.pad = new Pad(this);
    this.bars = new Bars();
  }

  // As large as the map of the study's own rule, or a tenth of the voxels where that is empty.
  #startCut() {
    const voxels = study.reported[0] + study.reported[1];
    const [effect, share] = [find("cut-effect"), find("cut-share")];
    const start = cutOfRank(this.reported, voxels || Math.round(this.reported.length / 10));
    effect.max = Math.max(0.1, Math.ceil(this.top * 100) / 100);
    effect.value = Math.round(start * 200) / 200;
    share.value = clamp(Math.round(voxels / this.reported.length * 100) || 10, 1, 50);
  }

  colours() {
    const dark = matchMedia("(prefers-color-scheme: dark)").matches && !this.printing;
    const theme = study.colours[dark ? "dark" : "light"];
    const opaque = (colours) => colours.map((colour) => [...colour, 255]);
    this.palette = {
      plus: opaque(theme.plus),
      minus: opaque(theme.minus),
      greys: opaque(theme.greys),
      ink: [...theme.ink, 255],
      hatch: [...theme.hatch, 255],
    };
  }

  get cut() {
    const kind = document.querySelector("[name=cut]:checked").value;
    return { kind, value: Number(find(`cut-${kind}`).value) };
  }

  get tails() {
    const tail = document.querySelector("[name=tail]:checked").value;
    return { plus: tail !== "minus", minus: tail !== "plus" };
  }

  moveTo(place, radius = this.radius) {
    const shift = place.map((value, axis) => value - study.at[axis]);
    const length = Math.hypot(...shift);
    const most = Math.min(1, this.reach / (length || 1));
    this.seed = shift.map((value, axis) => study.at[axis] + value * most);
    this.radius = radius;
    this.update();
  }

  goTo(row) {
    const one = placements[row];
    this.moveTo([one.x, one.y, one.z], one.radius);
  }

  lookAt(place) {
    this.look = place.map((value, axis) => clamp(value, frame[0][axis], frame[1][axis]));
    for (const slice of this.slices) slice.cross();
    this.draw();
    find("looking").textContent = mm(this.look);
  }

  update() {
    const begin = performance.now();
    this.blend = neighbours(this.seed, this.radius);
    this.at = this.blend.length === 1 && this.blend[0].gap < 1e-6 ? this.blend[0].row : NOWHERE;
    this.maps.fill(this.values, this.blend);
    const { kind, value } = this.cut;
    const rank = Math.round(value / 100 * this.values.length);
    this.cuts = kind === "effect"
      ? [value, value] : [cutOfRank(this.values, rank), cutOfRank(this.reported, rank)];
    if (this.cuts[1] !== this.reportedCut) this.#classify(this.cuts[1]);
    this.found = compare(this.values, this.reported, ...this.cuts);
    this.#regions();
    this.draw();
    this.pad.draw();
    this.bars.draw(this.regionMeans);
    tell(this);
    this.milliseconds = performance.now() - begin;
  }

  #classify(cut) {
    this.reportedCut = cut;
    for (let v = 0; v < this.reported.length; v += 1) {
      this.reportedClasses[v] = (this.reported[v] >= cut) - (this.reported[v] <= -cut);
    }
  }

  #regions() {
    const sums = new Float64Array(regions.length + 1);
    for (let v = 0; v < this.values.length; v += 1) sums[this.regionOf[v]] += this.values[v];
    this.regionMeans = [...this.regionSizes].map((n, k) => (n ? sums[k + 1] / n : null));
  }

  // What the slices show: values, the cut, and the value that gets the full colour.
  get shown() {
    const view = find("view").value;
    if (view === "share") return { share: true, cut: 0.05 * SHARE_CODE, top: SHARE_CODE };
    return view === "reported"
      ? { values: this.reported, cut: this.cuts[1], top: this.top }
      : { values: this.values, cut: this.cuts[0], top: this.top };
  }

  draw() {
    const shown = this.shown;
    for (const slice of this.slices) slice.draw(shown);
    drawKey(this, shown);
  }
}

// One way for mouse, pen and touch; `tap` is a press that did not travel.
function followPointer(node, move, tap) {
  let start = null;
  node.addEventListener("pointerdown", (event) => {
    if (event.button !== 0) return;
    start = [event.clientX, event.clientY];
    node.setPointerCapture(event.pointerId);
    node.focus({ preventScroll: true });
    move(event);
  });
  node.addEventListener("pointermove", (event) => start && move(event));
  node.addEventListener("pointerup", (event) => {
    const travelled = start ? Math.hypot(event.clientX - start[0], event.clientY - start[1]) : Infinity;
    start = null;
    if (tap && travelled < 4) tap(event);
  });
  node.addEventListener("pointercancel", () => { start = null; });
}

function startTables() {
  for (const button of all("th button[data-column]")) {
    button.addEventListener("click", () => {
      const head = button.closest("th");
      const table = head.closest("table");
      const down = head.getAttribute("aria-sort") === "ascending";
      for (const other of table.querySelectorAll("th[aria-sort]")) other.setAttribute("aria-sort", "none");
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const column = Number(button.dataset.column);
      const key = (row) => row.cells[column].dataset.value ?? row.cells[column].textContent.trim();
      const rows = [...table.tBodies[0].rows].sort((a, b) => {
        const [x, y] = [key(a), key(b)];
        if (x === "" || y === "") return (x === "") - (y === "");
        const order = Number.isNaN(Number(x)) || Number.isNaN(Number(y))
          ? x.localeCompare(y) : Number(x) - Number(y);
        return down ? -order : order;
      });
      table.tBodies[0].append(...rows);
    });
  }
}

function startCopy() {
  find("copy").addEventListener("click", async () => {
    const text = find("methods-text").textContent;
    let done = true;
    try {
      await navigator.clipboard.writeText(text);
    } catch {
      // pages from disk may not reach the clipboard: select the text, so that one key copies it
      getSelection().selectAllChildren(find("methods-text"));
      done = document.execCommand("copy");
    }
    find("copied").textContent = done ? "Copied." : "The text is selected; copy it with your keyboard.";
  });
}

async function startBench() {
  const count = study.maps.steps.length;
  const names = ["analysis", "anatomy", "regions", "share_positive", "share_negative",
    ...Array.from({ length: count }, (_, k) => `map${k}`)];
  const [analysis, anatomy, labels, positive, negative, ...codes] = await Promise.all(names.map(unpack));
  const rowOf = new Int32Array(analysis.length).fill(NOWHERE);
  let row = 0;
  analysis.forEach((inside, at) => { if (inside) rowOf[at] = row++; });
  const [nx, ny, nz] = study.shape;
  // a voxel counts by its centre, so the zone ends half a voxel's diagonal off the widened sphere
  const zone = study.radius + study.margin + study.diagonal / 2;
  const arrays = {
    rowOf,
    regionOf: new Uint16Array(labels.buffer),
    shareAt: (v, tails) => {
      const [plus, minus] = [tails.plus ? positive[v] : 0, tails.minus ? negative[v] : 0];
      return plus >= minus ? plus : -minus;
    },
    // linear between voxels: the picture underneath may look smooth, the map may not
    greyAt: (right, front, upward) => {
      const [x, y, z] = [Math.floor(right), Math.floor(front), Math.floor(upward)];
      const [p, q, s] = [right - x, front - y, upward - z];
      const at = (i, j, k) =>
        anatomy[clamp(i, 0, nx - 1) + nx * (clamp(j, 0, ny - 1) + ny * clamp(k, 0, nz - 1))];
      const plane = (k) => (1 - q) * ((1 - p) * at(x, y, k) + p * at(x + 1, y, k)) +
        q * ((1 - p) * at(x, y + 1, k) + p * at(x + 1, y + 1, k));
      return Math.round((1 - s) * plane(z) + s * plane(z + 1));
    },
    inZone: (point) => {
      const shift = Math.hypot(...point.map((value, axis) => value - study.at[axis]));
      if (shift > zone + Math.max(...placements.map((one) => one.distance))) return false;
      return placements.some((one) =>
        Math.hypot(point[0] - one.x, point[1] - one.y, point[2] - one.z) <= zone + one.radius - study.radius);
    },
  };
  const bench = new Bench(arrays, new Maps(codes.map(summed), study.maps));
  connect(bench);
  bench.update();
  return bench;
}

function connect(bench) {
  for (const node of all("[name=cut], #cut-effect, #cut-share")) {
    node.addEventListener("input", () => {
      if (node.type === "range") find(`by-${node.id.slice(4)}`).checked = true;
      bench.update();
    });
  }
  for (const node of all("[name=tail], #view, #outline")) node.addEventListener("change", () => bench.draw());
  find("placement").addEventListener("change", ({ target }) => {
    if (target.value !== "") bench.goTo(Number(target.value));
  });
  const order = [...placements.keys()]
    .sort((a, b) => placements[a].distance - placements[b].distance || a - b);
  const stepBy = (way) => {
    const at = order.indexOf(bench.at === NOWHERE ? bench.blend[0].row : bench.at);
    bench.goTo(order[(at + way + order.length) % order.length]);
  };
  find("next").addEventListener("click", () => stepBy(1));
  find("previous").addEventListener("click", () => stepBy(-1));
  find("home").addEventListener("click", () => bench.goTo(0));
  for (const node of all("[data-look]")) {
    node.addEventListener("click", () => bench.lookAt(node.dataset.look.split(" ").map(Number)));
  }
  find("look-seed").addEventListener("click", () => bench.lookAt(bench.seed));
  document.addEventListener("click", (event) => {
    const mark = event.target.closest("[data-placement]");
    if (!mark) return;
    bench.goTo(placements.findIndex((one) => String(one.name) === mark.dataset.placement));
  });
  const repaint = () => { bench.colours(); bench.draw(); };
  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", repaint);
  addEventListener("beforeprint", () => { bench.printing = true; repaint(); });
  addEventListener("afterprint", () => { bench.printing = false; repaint(); });
}

// what the console and the tests may look at
window.explorer = { study, bench: null, ready: null };

startTables();
startCopy();
window.explorer.ready = (async () => {
  if (typeof DecompressionStream === "undefined") {
    find("no-maps")?.removeAttribute("hidden");
    return;
  }
  await startPairs();
  if (!study.maps) return;
  window.explorer.bench = await startBench();
  find("bench").hidden = false;
})();
