// The viewer: one state, drawn again as a whole whenever it changes.

const $ = (id) => document.getElementById(id);
const stage = $("v-stage");
const FACTORS = [1, 2, 5, 10, 20, 50, 100];

const state = {
  scan: 0, arm: "", other: "", draw: 0, slice: 0, mode: "side", turn: 0, edge: 0.5,
  zoom: 1, centre: [0.5, 0.5], factor: study.factor, metric: study.metric, map: "", probe: null,
  feature: 0, site: 0,
  windows: study.scans.map((s) => [...s.window]),
};
let panels = [];
let shape = "";
let rasters = [];
let waiting = false;

const scan = () => study.scans[state.scan];
const armName = (id) => study.arms.find((a) => a.id === id).label;
const imageOf = (arm) => {
  const of = scan().images.filter((i) => i.arm === arm);
  return of.find((i) => i.draw === state.draw) || of[0];
};
const mapOf = (arm) => {
  const of = scan().maps.filter((m) => m.kind === state.map && m.arm === arm);
  return of.find((m) => m.draw === state.draw) || of[0];
};
const featureOf = (arm) => {
  const of = scan().features.filter((f) => f.number === state.feature && f.arm === arm);
  return of.find((f) => f.draw === imageOf(arm).draw) || null;
};
const errorEnd = () => (scan().window[1] - scan().window[0]) / state.factor;

function plain(value, digits = 3) {
  if (value === null || value === undefined || Number.isNaN(value)) return "–";
  const size = Math.abs(value);
  if (size === 0) return "0";
  const text = size >= 1e6 || size < 1e-4 ? value.toExponential(digits - 1)
    : size >= 10 ** digits ? value.toFixed(0) : value.toPrecision(digits);
  return text.replace("-", "−");
}

function element(tag, attributes = {}, ...children) {
  const made = document.createElement(tag);
  for (const [key, value] of Object.entries(attributes)) {
    if (key in made && key !== "style") made[key] = value;
    else made.setAttribute(key, value);
  }
  made.append(...children);
  return made;
}

function fill(select, options, value) {
  select.replaceChildren(...options.map(([v, text]) => element("option", { value: v }, text)));
  select.value = value;
}

// What each panel shows: [title, kind, first image, second image].
function plan() {
  const { arm, other, mode, turn } = state;
  const name = armName(arm);
  if (mode === "flip") {
    const turns = [["reference", "truth"], [name, "image", arm]];
    if (other) turns.push([armName(other), "image", other]);
    return [turns[turn % turns.length]];
  }
  if (mode === "swipe") return [[`${other ? armName(other) : "reference"} | ${name}`, "swipe", arm, other]];
  if (mode === "overlay") {
    const list = [[`${name}, error laid over`, "overlay", arm]];
    if (other) list.push([`${armName(other)}, error laid over`, "overlay", other]);
    return list;
  }
  const list = [["reference", "truth"], [other ? `first: ${name}` : name, "image", arm]];
  const measures = [arm, other].filter((a) => a && mapOf(a)).map((a) => {
    const whose = other ? `${a === arm ? "first" : "second"}: ` : "";
    return [`${whose}${mapOf(a).label}, ${plain(mapOf(a).low)} to ${plain(mapOf(a).top)}`, "measure", a];
  });
  const scale = `×${state.factor}`;
  if (!other) return [...list, [`error ${scale}`, "error", arm], ...measures];
  return [...list, [`second: ${armName(other)}`, "image", other],
    [`second less first, ${scale}`, "between", other, arm],
    [`first: error ${scale}`, "error", arm],
    [`second: error ${scale}`, "error", other],
    ...measures];
}

// Lattice numbers of the slice in view: reference, changes by arm, measures by arm. A chosen feature
// is added to reference and recovered images where every arm in view has it.
async function numbersInView(arms) {
  const s = scan();
  const size = s.rows * s.columns;
  const part = async (facts, position) => (await numbersOf(facts)).subarray(position * size, (position + 1) * size);
  const view = { truth: await part(s.reference, state.slice), change: {}, measured: {}, feature: false };
  const position = state.slice;
  for (const arm of arms) {
    view.change[arm] = await part(imageOf(arm), position);
    if (mapOf(arm)) view.measured[arm] = await part(mapOf(arm), position);
  }
  const found = arms.map((arm) => featureOf(arm));
  if (!found.every((f) => f && f.positions.includes(position))) return view;
  const added = await part(found[0].reference, found[0].positions.indexOf(position));
  // A dark feature cannot take a magnitude below zero.
  const before = view.truth;
  view.truth = before.map((v, i) => Math.max(0, v + added[i]));
  for (const [n, arm] of arms.entries()) {
    const own = await part(found[n].change, found[n].positions.indexOf(position));
    view.change[arm] = view.change[arm].map((v, i) => Math.max(0, before[i] + v + own[i]) - view.truth[i]);
  }
  view.feature = true;
  return view;
}

// Canvases are made again only when the number of panels or the grid changes.
function layPanels(wanted) {
  const s = scan();
  const key = `${wanted.length} ${s.rows} ${s.columns} ${state.scan}`;
  if (key === shape) return;
  shape = key;
  rasters = wanted.map(() => new Raster(s.rows, s.columns)).concat(new Raster(s.rows, s.columns));
  const across = s.columns * s.columnMm;
  const down = s.rows * s.rowMm;
  const several = wanted.length % 4 === 0 ? 4 : Math.min(3, wanted.length);
  stage.style.setProperty("--across", several);
  stage.style.setProperty("--down", Math.ceil(wanted.length / several));
  stage.style.setProperty("--shape", across / down);
  const times = Math.max(1, Math.round((wanted.length > 1 ? 640 : 1024) / Math.max(s.rows, s.columns)));
  panels = wanted.map((_, index) => {
    const canvas = element("canvas", { width: s.columns * times, height: s.rows * times });
    canvas.dataset.panel = index;
    const cross = element("i", { className: "cross", hidden: true });
    const ends = s.ends.map((letter, i) => element("span", { className: `end e${i}` }, letter));
    const frame = element("div", { className: "frame" }, canvas, cross, ...ends);
    frame.style.aspectRatio = `${across} / ${down}`;
    const title = element("p", { className: "panel-title" });
    return { canvas, cross, frame, title, box: element("div", { className: "panel" }, title, frame) };
  });
  stage.replaceChildren(...panels.map((p) => p.box));
}

async function draw() {
  waiting = false;
  const s = scan();
  const wanted = plan();
  const arms = [state.arm, state.other].filter((a, n, all) => a && all.indexOf(a) === n);
  const choice = () => JSON.stringify([state.scan, state.arm, state.other, state.draw, state.map, state.slice, state.feature]);
  const marks = choice();
  const { truth, change, measured, feature } = await numbersInView(arms);
  // Something was chosen meanwhile: another drawing is on its way.
  if (marks !== choice()) return;
  layPanels(wanted);
  const [low, high] = state.windows[state.scan];
  const levels = greyLevels(s.step, low, high);
  const rect = viewRect(s.rows, s.columns, state.zoom, state.centre);
  wanted.forEach(([title, kind, a, b], index) => {
    const raster = rasters[index];
    const { canvas } = panels[index];
    if (kind === "truth") raster.grey(levels, truth, null);
    else if (kind === "image" || kind === "swipe") raster.grey(levels, truth, change[a]);
    else if (kind === "measure") raster.measure(measured[a]);
    else if (kind === "error") raster.difference(change[a], null, s.step, errorEnd());
    else if (kind === "between") raster.difference(change[a], change[b], s.step, errorEnd());
    else raster.overlay(levels, truth, change[a], s.step, errorEnd());
    drawRaster(canvas, raster.canvas, rect);
    if (kind === "swipe") {
      const left = rasters[wanted.length].grey(levels, truth, b ? change[b] : null);
      drawRaster(canvas, left, rect, 0, state.edge);
      const context = canvas.getContext("2d");
      context.fillStyle = "#e69f00";
      context.fillRect(Math.round(state.edge * canvas.width) - 1, 0, 3, canvas.height);
    }
    const empty = kind === "measure" && !measured[a].some((n) => n > 0);
    const named = feature && kind !== "measure" ? `${title}, with feature` : title;
    panels[index].title.textContent = empty ? `not measured in this slice: ${title}` : named;
    canvas.setAttribute("role", "img");
    canvas.setAttribute("aria-label", `${title}, ${s.name}, ${sliceName(state.slice)}`);
  });
  drawScales(low, high);
  showProbe(truth, change, measured);
  showRings(rect, feature);
  showTrack();
  stage.dataset.painted = [s.id, state.slice, state.mode, state.turn].join(" ");
}

function refresh() {
  delete stage.dataset.painted;
  if (waiting) return;
  waiting = true;
  requestAnimationFrame(draw);
}

function sliceName(position) {
  const { plane, frame } = scan().slices[position];
  return `${scan().letters[0]} = ${plane}${scan().frames > 1 ? `, frame ${frame}` : ""}`;
}

function say(text) {
  $("v-say").textContent = text;
}

// Bars under the images: grey window and signed error, with their ends written.
function drawScales(low, high) {
  const ramp = $("v-error-bar").getContext("2d");
  for (let i = 0; i < 255; i += 1) {
    const c = signed[i];
    const [r, g, b] = little ? [c & 255, c >> 8 & 255, c >> 16 & 255] : [c >>> 24, c >> 16 & 255, c >> 8 & 255];
    ramp.fillStyle = `rgb(${r},${g},${b})`;
    ramp.fillRect(i, 0, 1, 10);
  }
  const bar = $("v-map-bar");
  bar.parentElement.hidden = !mapOf(state.arm);
  if (mapOf(state.arm)) {
    const context = bar.getContext("2d");
    const image = context.createImageData(255, 1);
    new Uint32Array(image.data.buffer).set(measureColours.subarray(1));
    for (let row = 0; row < bar.height; row += 1) context.putImageData(image, 0, row);
    $("v-map-ends").textContent = `${plain(mapOf(state.arm).low)} to ${plain(mapOf(state.arm).top)}, black: no value`;
  }
  $("v-grey-ends").textContent = `${plain(low)} to ${plain(high)}`;
  $("v-error-ends").textContent = `−${plain(errorEnd())} to +${plain(errorEnd())} (window ×${state.factor})`;
}

// Values at the read-out point.
function showProbe(truth, change, measured) {
  const s = scan();
  panels.forEach(({ cross }) => { cross.hidden = true; });
  if (!state.probe) {
    $("v-read").textContent = `Point at an image to read values. Stored in steps of ${plain(s.step, 2)}.`;
    return;
  }
  const [row, column] = state.probe;
  const rect = viewRect(s.rows, s.columns, state.zoom, state.centre);
  for (const { cross } of panels) {
    cross.hidden = false;
    cross.style.left = `${100 * (column + 0.5 - rect.left) / rect.width}%`;
    cross.style.top = `${100 * (row + 0.5 - rect.top) / rect.height}%`;
  }
  const at = row * s.columns + column;
  const index = voxel(row, column);
  const mm = worldOf(row, column).map((x) => x.toFixed(1).replace("-", "−"));
  const parts = [`i ${index.i}, j ${index.j}, k ${index.k}`, `${mm.join(", ")} mm`, `reference ${plain(truth[at] * s.step, 4)}`];
  for (const arm of [state.arm, state.other].filter(Boolean)) {
    if (!change[arm]) continue;
    const error = change[arm][at] * s.step;
    const sign = error > 0 ? "+" : "";
    parts.push(`${armName(arm)} ${plain((truth[at] + change[arm][at]) * s.step, 4)}, error ${sign}${plain(error, 3)} (${sign}${plain(100 * error / s.largest, 2)} % of the largest)`);
    if (measured[arm]) {
      const number = measured[arm][at];
      const { low, top } = mapOf(arm);
      const value = number ? plain(low + (number - 1) / 254 * (top - low), 3) : "no value";
      parts.push(`${mapOf(arm).label} ${value}`);
    }
  }
  $("v-read").textContent = parts.join("  ·  ");
}

// Rings around the sites of the chosen feature, beside the pixels and not in them.
function showRings(rect, shown) {
  const s = scan();
  const facts = shown ? featureOf(state.arm) : null;
  const sites = facts ? facts.sites.filter((site) => site.slice === state.slice) : [];
  const across = facts ? 100 * (2 * facts.mm / s.columnMm + 4) / rect.width : 0;
  for (const { frame } of panels) {
    frame.querySelectorAll(".ring").forEach((ring) => ring.remove());
    frame.append(...sites.map((site) => {
      const ring = element("i", { className: site === facts.sites[state.site] ? "ring at" : "ring" });
      ring.style.left = `${100 * (site.column + 0.5 - rect.left) / rect.width}%`;
      ring.style.top = `${100 * (site.row + 0.5 - rect.top) / rect.height}%`;
      ring.style.width = `${across}%`;
      return ring;
    }));
  }
  const site = facts && facts.sites[state.site];
  $("v-site-text").textContent = facts
    ? [state.arm, state.other].filter(Boolean).map((arm) => {
      const own = featureOf(arm).sites[state.site];
      return `${state.other ? `${armName(arm)}: ` : ""}${Math.round(100 * own.kept)} % of its contrast kept here, ${Math.round(100 * featureOf(arm).kept)} % on average`;
    }).join("; ") + `; site ${state.site + 1} of ${facts.sites.length}${site.slice === state.slice ? "" : " is in another slice"}`
    : "";
}

function voxel(row, column) {
  const s = scan();
  const [p, r, c] = s.letters;
  return {
    [p]: s.slices[state.slice].plane,
    [r]: s.flips[0] ? s.rows - 1 - row : row,
    [c]: s.flips[1] ? s.columns - 1 - column : column,
  };
}

function worldOf(row, column) {
  const m = scan().mm;
  const v = [scan().slices[state.slice].plane, row, column, 1];
  return [0, 1, 2].map((r) => m[4 * r] * v[0] + m[4 * r + 1] * v[1] + m[4 * r + 2] * v[2] + m[4 * r + 3]);
}
