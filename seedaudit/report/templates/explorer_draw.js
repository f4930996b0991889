// What is drawn for a state of the bench: slices, pad, bars, key, words, pairs.

class Slice {
  constructor(kind, bench) {
    [this.along, this.up, this.through] = AXES[kind];
    Object.assign(this, { kind, bench, canvas: find(`slice-${kind}`), over: find(`over-${kind}`) });
    const size = [this.along, this.up].map((axis) => frame[1][axis] - frame[0][axis]);
    this.step = Math.max(...[0, 1, 2].map((axis) => frame[1][axis] - frame[0][axis])) / 300;
    [this.width, this.height] = size.map((length) => Math.round(length / this.step));
    this.canvas.width = this.width;
    this.canvas.height = this.height;
    this.over.setAttribute("viewBox", `${frame[0][this.along]} ${-frame[1][this.up]} ${size[0]} ${size[1]}`);
    this.rows = new Int32Array(this.width * this.height);
    this.under = new Uint8Array(this.rows.length);
    this.zone = new Uint8Array(this.rows.length);
    this.image = new ImageData(this.width, this.height);
    this.#marks();
    this.cross();
    followPointer(this.canvas, (event) => bench.lookAt(this.#place(event)));
    this.canvas.addEventListener("keydown", (event) => this.#key(event));
  }

  #marks() {
    const thin = { "vector-effect": "non-scaling-stroke" };
    this.tickAlong = svg("path", { class: "tick", ...thin }, this.over);
    this.sphereBack = svg("circle", { class: "sphere back", ...thin }, this.over);
    this.sphere = svg("circle", { class: "sphere", ...thin }, this.over);
    this.dot = svg("path", { class: "seed" }, this.over);
  }

  #place(event) {
    const box = this.canvas.getBoundingClientRect();
    const place = [...this.bench.look];
    const size = (axis) => frame[1][axis] - frame[0][axis];
    place[this.along] = frame[0][this.along] + (event.clientX - box.left) / box.width * size(this.along);
    place[this.up] = frame[1][this.up] - (event.clientY - box.top) / box.height * size(this.up);
    return place;
  }

  #key(event) {
    const keys = {
      ArrowLeft: [this.along, -1], ArrowRight: [this.along, 1], ArrowUp: [this.up, 1],
      ArrowDown: [this.up, -1], PageUp: [this.through, 1], PageDown: [this.through, -1],
    };
    if (!(event.key in keys)) return;
    event.preventDefault();
    const [axis, way] = keys[event.key];
    const place = [...this.bench.look];
    place[axis] += way * study.edge;
    this.bench.lookAt(place);
  }

  // Which voxel, which grey and which hatching every pixel has on the plane looked at.
  cross() {
    const { bench, along, up, through, width, height, step } = this;
    const [nx, ny, nz] = study.shape;
    const [a, b, c] = study.toVoxel;
    const point = [0, 0, 0];
    point[through] = bench.look[through];
    for (let j = 0, pixel = 0; j < height; j += 1) {
      point[up] = frame[1][up] - (j + 0.5) * step;
      for (let i = 0; i < width; i += 1, pixel += 1) {
        point[along] = frame[0][along] + (i + 0.5) * step;
        const x = a[0] * point[0] + a[1] * point[1] + a[2] * point[2] + a[3];
        const y = b[0] * point[0] + b[1] * point[1] + b[2] * point[2] + b[3];
        const z = c[0] * point[0] + c[1] * point[1] + c[2] * point[2] + c[3];
        const [p, q, s] = [Math.floor(x + 0.5), Math.floor(y + 0.5), Math.floor(z + 0.5)];
        const inside = p >= 0 && q >= 0 && s >= 0 && p < nx && q < ny && s < nz;
        const row = inside ? bench.rowOf[p + nx * (q + ny * s)] : NOWHERE;
        this.rows[pixel] = row;
        this.under[pixel] = inside ? bench.greyAt(x, y, z) : 0;
        this.zone[pixel] = inside && row === NOWHERE && bench.inZone(point) ? 1 : 0;
      }
    }
    this.#edgeMarks();
  }

  #edgeMarks() {
    const { bench, along, up, through } = this;
    const [x, y] = [bench.look[along], -bench.look[up]];
    const [left, right, top, bottom] = [frame[0][along], frame[1][along], -frame[1][up], -frame[0][up]];
    this.tickAlong.setAttribute("d",
      `M${x} ${top}v6M${x} ${bottom}v-6M${left} ${y}h6M${right} ${y}h-6`);
    find(`place-${this.kind}`).textContent =
      `${"xyz"[through]} = ${sign(bench.look[through].toFixed(1))} mm`;
  }

  draw(shown) {
    const { bench, rows, under, zone, width, height } = this;
    const { greys, ink } = bench.palette;
    const { data } = this.image;
    const tails = bench.tails;
    const classes = find("outline").checked ? bench.reportedClasses : null;
    for (let j = 0, pixel = 0; j < height; j += 1) {
      for (let i = 0; i < width; i += 1, pixel += 1) {
        const row = rows[pixel];
        let colour = greys[under[pixel]];
        if (row !== NOWHERE) {
          const value = shown.share ? bench.shareAt(row, tails) : shown.values[row];
          if (Math.abs(value) >= shown.cut && (value > 0 ? tails.plus : tails.minus)) {
            colour = this.#colour(value, shown, i - j);
          }
          if (classes && isEdge(classes, rows, pixel, width, i + j)) colour = ink;
        } else if (zone[pixel] && (i + j) % 5 === 0) {
          colour = ink;
        }
        [data[4 * pixel], data[4 * pixel + 1], data[4 * pixel + 2], data[4 * pixel + 3]] = colour;
      }
    }
    this.canvas.getContext("2d").putImageData(this.image, 0, 0);
    this.#seed();
  }

  // Class − is striped, so that colour is not all that tells it from class +.
  #colour(value, shown, diagonal) {
    const { plus, minus, hatch } = this.bench.palette;
    const part = (Math.abs(value) - shown.cut) / Math.max(shown.top - shown.cut, 1e-9);
    const level = Math.round((plus.length - 1) * clamp(part, 0, 1));
    if (value > 0) return plus[level];
    return diagonal % 5 ? minus[level] : hatch;
  }

  // The sphere as the plane cuts it, and the centre projected on the plane.
  #seed() {
    const { seed, radius, look } = this.bench;
    const off = seed[this.through] - look[this.through];
    const [x, y] = [seed[this.along], -seed[this.up]];
    const r = Math.sqrt(Math.max(0, radius ** 2 - off ** 2));
    for (const circle of [this.sphereBack, this.sphere]) {
      circle.setAttribute("cx", x);
      circle.setAttribute("cy", y);
      circle.setAttribute("r", r);
    }
    this.dot.setAttribute("d", `M${x - 3} ${y}l3 -3l3 3l-3 3z`);
  }
}

// Whether a pixel lies on the border of a class of the reported map; dashed around class −.
function isEdge(classes, rows, pixel, width, position) {
  const kind = classes[rows[pixel]];
  for (const other of [pixel + 1, pixel + width]) {
    const row = other < rows.length ? rows[other] : NOWHERE;
    const next = row === NOWHERE ? 0 : classes[row];
    if (next !== kind && (kind === 1 || next === 1 || position % 4 < 2)) return true;
  }
  return false;
}

class Pad {
  constructor(bench) {
    this.bench = bench;
    this.node = find("pad");
    this.half = bench.reach * 1.18 + 0.5;
    this.node.setAttribute("viewBox", `${-this.half} ${-this.half} ${2 * this.half} ${2 * this.half}`);
    const thin = { "vector-effect": "non-scaling-stroke" };
    svg("circle", { r: bench.reach, class: "rim", ...thin }, this.node);
    const ring = [0.5, 1, 2, 5, 10, 20].find((size) => bench.reach / size <= 5) || 50;
    for (let r = ring; r < bench.reach; r += ring) svg("circle", { r, class: "ring", ...thin }, this.node);
    find("ring-note").textContent = `Rings are ${ring} mm apart.`;
    this.dots = placements.map((one, row) => {
      const [x, y] = [one.x - study.at[0], study.at[1] - one.y];
      const s = this.half / (row === 0 ? 18 : 24);
      return row === 0
        ? svg("path", { d: `M${x - s} ${y}l${s} ${-s}l${s} ${s}l${-s} ${s}z`, class: "dot home" }, this.node)
        : svg("circle", { cx: x, cy: y, r: s, class: "dot", ...thin }, this.node);
    });
    this.hand = svg("g", { class: "hand" }, this.node);
    const arm = this.half / 9;
    svg("circle", { r: arm * 0.6, ...thin }, this.hand);
    svg("path", { d: `M${-arm} 0H${arm}M0 ${-arm}V${arm}`, ...thin }, this.hand);
    this.lift = find("lift");
    this.lift.min = -bench.reach;
    this.lift.max = bench.reach;
    this.lift.step = bench.reach / 100;
    this.lift.addEventListener("input", () => this.#shift(2, Number(this.lift.value), true));
    followPointer(this.node, (event) => this.#drag(event), (event) => this.#tap(event));
    this.node.addEventListener("keydown", (event) => this.#key(event));
  }

  #drag(event) {
    const box = this.node.getBoundingClientRect();
    const x = ((event.clientX - box.left) / box.width - 0.5) * 2 * this.half;
    const y = (0.5 - (event.clientY - box.top) / box.height) * 2 * this.half;
    const { at } = study;
    this.bench.moveTo([at[0] + x, at[1] + y, this.bench.seed[2]]);
  }

  // A tap on a dot goes to that placement, its height included.
  #tap(event) {
    const near = this.dots
      .map((dot, row) => {
        const box = dot.getBoundingClientRect();
        const [x, y] = [box.left + box.width / 2, box.top + box.height / 2];
        const gap = Math.hypot(event.clientX - x, event.clientY - y);
        return { row, gap: placements[row].radius === this.bench.radius ? gap : Infinity };
      })
      .sort((a, b) => a.gap - b.gap)[0];
    if (near.gap <= 7) this.bench.goTo(near.row);
  }

  #shift(axis, value, absolute) {
    const place = [...this.bench.seed];
    place[axis] = absolute ? study.at[axis] + value : place[axis] + value;
    this.bench.moveTo(place);
  }

  #key(event) {
    const keys = {
      ArrowLeft: [0, -1], ArrowRight: [0, 1], ArrowUp: [1, 1], ArrowDown: [1, -1],
      PageUp: [2, 1], PageDown: [2, -1],
    };
    if (event.key === "Home") {
      this.bench.goTo(0);
    } else if (event.key in keys) {
      const [axis, way] = keys[event.key];
      this.#shift(axis, way * (event.shiftKey ? 2 : 0.5));
    } else {
      return;
    }
    event.preventDefault();
  }

  draw() {
    const { seed, at, reach, radius } = this.bench;
    const shift = seed.map((value, axis) => value - study.at[axis]);
    this.hand.setAttribute("transform", `translate(${shift[0]} ${-shift[1]})`);
    this.lift.value = shift[2];
    this.lift.setAttribute("aria-valuetext", `${fixed(shift[2], 1)} mm upwards`);
    this.dots.forEach((dot, row) => {
      const one = placements[row];
      // nearer in height is stronger
      const far = Math.abs(one.z - seed[2]) / reach;
      dot.setAttribute("opacity", one.radius === radius ? clamp(1 - far, 0.2, 1) : 0);
      dot.classList.toggle("here", row === at);
    });
  }
}

class Bars {
  constructor() {
    this.nodes = all("#bars [data-bar]");
    this.scale = Number(find("bars").dataset.scale);
  }

  draw(means) {
    this.nodes.forEach((node, k) => {
      const value = means[k];
      const length = clamp((value || 0) / this.scale, -1, 1) * 100;
      const bar = node.querySelector(".live");
      bar.setAttribute("x", 100 + Math.min(0, length));
      bar.setAttribute("width", Math.abs(length));
      bar.setAttribute("class", `live ${value < 0 ? "minus" : "plus"}`);
      node.querySelector("output").textContent =
        value === null ? "n/a" : (value >= 0.005 ? "+" : "") + fixed(value, 2).replace("−0.00", "0.00");
    });
  }
}

function drawKey(bench, shown) {
  const canvas = find("key");
  const context = canvas.getContext("2d");
  const { plus, minus, hatch } = bench.palette;
  for (let i = 0; i < 64; i += 1) {
    context.fillStyle = `rgb(${minus[63 - i].slice(0, 3).join()})`;
    context.fillRect(i, 0, 1, 10);
    context.fillStyle = `rgb(${plus[i].slice(0, 3).join()})`;
    context.fillRect(76 + i, 0, 1, 10);
  }
  context.fillStyle = `rgb(${hatch.slice(0, 3).join()})`;
  for (let j = 0; j < 10; j += 1) {
    for (let i = j; i < 64; i += 5) context.fillRect(i, j, 1, 1);
  }
  const words = (value) => (shown.share
    ? `${Math.round(value / SHARE_CODE * 100)} %` : Number.isFinite(value) ? value.toFixed(2) : "∞");
  find("key-low").textContent = `class −: ${sign(`-${words(shown.top)}`)} to ${sign(`-${words(shown.cut)}`)}`;
  find("key-high").textContent = `class +: ${words(shown.cut)} to ${words(shown.top)}`;
  find("key-unit").textContent = shown.share ? "share of drawn placements" : "effect, Fisher z";
}

let speaking = 0;

function tell(bench) {
  const { seed, at, found, blend } = bench;
  const gap = Math.hypot(...seed.map((value, axis) => value - study.at[axis]));
  const nearest = blend[0];
  const name = (row) => (row === 0 ? "the reported placement" : `placement ${placements[row].name}`);
  find("seed-place").textContent = mm(seed);
  find("seed-shift").textContent = `${fixed(gap, 1)} mm`;
  find("seed-source").textContent = at === NOWHERE
    ? `Between placements: a blend of the ${blend.length} nearest, the nearest ` +
      `${fixed(nearest.gap, 1)} mm away (${name(nearest.row)}).`
    : `At ${name(at)}, not blended.`;
  find("cut-effect-shown").textContent = Number(find("cut-effect").value).toFixed(3);
  find("cut-share-shown").textContent = `${find("cut-share").value} %`;
  ["positive", "negative"].forEach((tail, i) => {
    find(`live-${tail}`).textContent = likeness(found.dice[i]);
    find(`live-n-${tail}`).textContent = found.sizes[i].toLocaleString("en");
    find(`rule-${tail}`).textContent = at === NOWHERE ? "–" : likeness(placements[at][tail]);
    find(`rule-n-${tail}`).textContent = at === NOWHERE ? "–"
      : placements[at][tail === "positive" ? "nPositive" : "nNegative"].toLocaleString("en");
  });
  find("live-r").textContent = likeness(found.r);
  find("rule-r").textContent = at === NOWHERE ? "–" : likeness(placements[at].r);
  find("placement").value = at === NOWHERE ? "" : String(at);
  for (const node of all(".here[data-placement]")) node.classList.remove("here");
  if (at !== NOWHERE) {
    for (const node of all(`[data-placement="${placements[at].name}"]`)) node.classList.add("here");
  }
  markPair(at);
  clearTimeout(speaking);
  // only where the seed comes to rest is spoken
  speaking = setTimeout(() => {
    find("spoken").textContent =
      `Seed at ${mm(seed)}, ${fixed(gap, 1)} mm from the reported centre. Dice plus ` +
      `${likeness(found.dice[0])}, Dice minus ${likeness(found.dice[1])}, spatial r ${likeness(found.r)}.`;
  }, 500);
}

let markPair = () => {};

async function startPairs() {
  const canvas = find("pairs-map");
  if (!canvas) return;
  const names = ["dice_positive", "dice_negative", "spatial_r"];
  const codes = Object.fromEntries(await Promise.all(
    names.map(async (name) => [name, await unpack(`pairs_${name}`)])));
  const n = placements.length - 1;
  const order = [...Array(n).keys()].sort((a, b) => placements[a + 1].distance - placements[b + 1].distance);
  const { cividis } = study.colours;
  canvas.width = canvas.height = n;
  const pair = (a, b) => {
    const [i, j] = a < b ? [a, b] : [b, a];
    return i * n - i * (i + 1) / 2 + (j - i - 1);
  };
  const draw = () => {
    const chosen = codes[find("pairs-measure").value];
    const image = new ImageData(n, n);
    for (let y = 0; y < n; y += 1) {
      for (let x = 0; x < n; x += 1) {
        const code = x === y ? SHARE_CODE : chosen[pair(order[x], order[y])];
        const colour = code === UNDEFINED_CODE ? [140, 140, 140]
          : cividis[Math.round(code / SHARE_CODE * (cividis.length - 1))];
        image.data.set([...colour, 255], 4 * (y * n + x));
      }
    }
    canvas.getContext("2d").putImageData(image, 0, 0);
  };
  const at = (event) => {
    const box = canvas.getBoundingClientRect();
    return [(event.clientX - box.left) / box.width, (event.clientY - box.top) / box.height]
      .map((share) => order[clamp(Math.floor(share * n), 0, n - 1)]);
  };
  canvas.addEventListener("pointermove", (event) => {
    const [a, b] = at(event);
    const code = a === b ? SHARE_CODE : codes[find("pairs-measure").value][pair(a, b)];
    find("pairs-here").textContent = `Placements ${placements[b + 1].name} and ${placements[a + 1].name}: ` +
      (code === UNDEFINED_CODE ? "undefined" : (code / SHARE_CODE).toFixed(2));
  });
  canvas.addEventListener("click", (event) => window.explorer.bench?.goTo(at(event)[1] + 1));
  find("pairs-measure").addEventListener("change", draw);
  markPair = (row) => {
    const mark = find("pairs-mark");
    mark.setAttribute("opacity", row > 0 ? 1 : 0);
    if (row > 0) mark.setAttribute("y", (order.indexOf(row - 1) / n) * 100);
    mark.setAttribute("height", 100 / n);
  };
  draw();
}
