// From the bytes of the page to the map of any place in the cloud, and to what it shares with
// the reported map.
const find = (id) => document.getElementById(id);
const all = (selector) => [...document.querySelectorAll(selector)];
const svg = (name, attributes, parent) => {
  const node = document.createElementNS("http://www.w3.org/2000/svg", name);
  for (const [key, value] of Object.entries(attributes)) node.setAttribute(key, value);
  if (parent) parent.append(node);
  return node;
};
const sign = (text) => text.replace("-", "−");
const fixed = (value, digits) =>
  value === null || !Number.isFinite(value) ? "n/a" : sign(value.toFixed(digits));
// rounded down, as in the text of the report: a similarity is never shown better than it is
const likeness = (value) =>
  value === null || !Number.isFinite(value)
    ? "n/a" : sign((Math.floor(value * 100 + 1e-9) / 100).toFixed(2));
const mm = (xyz) => `(${xyz.map((value) => sign(value.toFixed(1))).join(", ")}) mm`;
const clamp = (value, low, high) => Math.min(high, Math.max(low, value));

const study = JSON.parse(find("numbers").textContent);
const { placements, regions, frame } = study;
const AXES = { coronal: [0, 2, 1], sagittal: [1, 2, 0], axial: [0, 1, 2] }; // along, up, through
const NEIGHBOURS = 6;
const NOWHERE = -1;
const UNDEFINED_CODE = 255;
const SHARE_CODE = 250;

async function unpack(name) {
  const text = find(`array-${name}`).textContent;
  const packed = Uint8Array.from(atob(text), (letter) => letter.charCodeAt(0));
  const stream = new Blob([packed]).stream().pipeThrough(new DecompressionStream("deflate"));
  return new Uint8Array(await new Response(stream).arrayBuffer());
}

// each code is stored as its difference from the one before
function summed(bytes) {
  const codes = new Int8Array(bytes.buffer);
  for (let v = 1; v < codes.length; v += 1) codes[v] += codes[v - 1];
  return codes;
}

// Weights of the placements around a place: 1 at a placement itself, elsewhere larger for the
// nearer ones and 0 from the one after the last neighbour on, so that nothing jumps.
function neighbours(place, radius) {
  const near = [];
  placements.forEach((other, row) => {
    if (other.radius !== radius) return;
    near.push({ row, gap: Math.hypot(place[0] - other.x, place[1] - other.y, place[2] - other.z) });
  });
  near.sort((a, b) => a.gap - b.gap || a.row - b.row);
  if (near[0].gap < 1e-6 || near.length === 1) return [{ row: near[0].row, gap: near[0].gap, share: 1 }];
  const last = Math.min(NEIGHBOURS, near.length - 1);
  const reach = near[last].gap;
  const chosen = near.slice(0, last);
  for (const one of chosen) one.share = ((reach - one.gap) / (reach * one.gap)) ** 2;
  const total = chosen.reduce((sum, one) => sum + one.share, 0);
  for (const one of chosen) one.share = total > 0 ? one.share / total : 1 / chosen.length;
  return chosen;
}

class Maps {
  constructor(codes, { steps, weights }) {
    Object.assign(this, { codes, steps, weights });
  }

  // Value of every voxel for blended placements; four patterns at a time, which reads less memory.
  fill(out, blend) {
    const [mean, ...patterns] = this.codes;
    const amount = patterns.map((_, k) =>
      this.steps[k + 1] * blend.reduce((sum, one) => sum + one.share * this.weights[one.row][k], 0));
    const step = this.steps[0];
    for (let v = 0; v < out.length; v += 1) out[v] = step * mean[v];
    let k = 0;
    for (; k + 3 < patterns.length; k += 4) {
      const [a, b, c, d] = patterns.slice(k, k + 4);
      const [e, f, g, h] = amount.slice(k, k + 4);
      for (let v = 0; v < out.length; v += 1) {
        out[v] += e * a[v] + f * b[v] + g * c[v] + h * d[v];
      }
    }
    for (; k < patterns.length; k += 1) {
      const [a, e] = [patterns[k], amount[k]];
      for (let v = 0; v < out.length; v += 1) out[v] += e * a[v];
    }
  }
}

// The value that so many voxels reach, by size: counted in bins, then sorted within one bin.
function cutOfRank(values, rank) {
  if (rank < 1) return Infinity;
  let most = 0;
  for (const value of values) most = Math.max(most, Math.abs(value));
  const bins = 4096;
  const scale = most > 0 ? (bins - 1) / most : 0;
  const counts = new Uint32Array(bins);
  for (const value of values) counts[Math.floor(Math.abs(value) * scale)] += 1;
  let bin = bins - 1;
  let above = 0;
  while (above + counts[bin] < rank) above += counts[bin--];
  const inside = [];
  for (const value of values) {
    if (Math.floor(Math.abs(value) * scale) === bin) inside.push(Math.abs(value));
  }
  return inside.sort((a, b) => b - a)[rank - above - 1];
}

// Sizes and overlap per tail, and spatial r, of two maps with their cuts.
function compare(a, b, cutA, cutB) {
  const size = { a: [0, 0], b: [0, 0], both: [0, 0] };
  let [sumA, sumB, sumAA, sumBB, sumAB] = [0, 0, 0, 0, 0];
  for (let v = 0; v < a.length; v += 1) {
    const x = a[v];
    const y = b[v];
    sumA += x; sumB += y; sumAA += x * x; sumBB += y * y; sumAB += x * y;
    if (x >= cutA) { size.a[0] += 1; if (y >= cutB) size.both[0] += 1; }
    if (y >= cutB) size.b[0] += 1;
    if (x <= -cutA) { size.a[1] += 1; if (y <= -cutB) size.both[1] += 1; }
    if (y <= -cutB) size.b[1] += 1;
  }
  const n = a.length;
  const spread = Math.sqrt((sumAA - sumA * sumA / n) * (sumBB - sumB * sumB / n));
  const dice = [0, 1].map((tail) => 2 * size.both[tail] / (size.a[tail] + size.b[tail]));
  return { dice, sizes: size.a, r: (sumAB - sumA * sumB / n) / spread };
}
