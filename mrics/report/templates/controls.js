// Controls of the viewer: menus, slider, pointer, wheel and keys.

function scores(arm) {
  const image = imageOf(arm);
  return (scan().scores[`${image.arm} ${image.draw}`] || {})[state.metric] || [];
}

function ranked(arm) {
  const lowIsGood = study.metrics.find((m) => m.key === state.metric).better === "low";
  return scores(arm)
    .map((value, position) => [value, position])
    .filter(([value]) => value !== null && value !== undefined)
    .sort((a, b) => (lowIsGood ? b[0] - a[0] : a[0] - b[0]))
    .map(([, position]) => position);
}

// The curve of the chosen metric over the slices, drawn above the slider.
function showTrack() {
  const s = scan();
  const count = s.slices.length;
  const lists = [state.arm, state.other].filter(Boolean).map(scores);
  const values = lists.flat().filter((v) => v !== null && Number.isFinite(v));
  const low = Math.min(...values);
  const span = Math.max(...values) - low || 1;
  const x = (i) => (count > 1 ? 1000 * i / (count - 1) : 500);
  const y = (v) => 82 - 74 * (v - low) / span;
  const svg = (tag, attributes) => {
    const made = document.createElementNS("http://www.w3.org/2000/svg", tag);
    for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
    return made;
  };
  const marks = lists.map((list, n) => svg("polyline", {
    class: `line l${n}`,
    points: list.flatMap((v, i) => (v === null ? [] : [`${x(i)},${y(v)}`])).join(" "),
  }));
  const [worst] = ranked(state.arm);
  if (worst !== undefined) marks.push(svg("line", { class: "worst", x1: x(worst), x2: x(worst), y1: 0, y2: 90 }));
  marks.push(svg("line", { class: "here", x1: x(state.slice), x2: x(state.slice), y1: 0, y2: 90 }));
  $("v-curve").replaceChildren(...marks);
  $("v-curve-low").textContent = values.length ? plain(low) : "";
  $("v-curve-high").textContent = values.length ? plain(Math.max(...values)) : "";
  const metric = study.metrics.find((m) => m.key === state.metric);
  const value = scores(state.arm)[state.slice];
  const unit = metric.unit ? ` ${metric.unit}` : "";
  $("v-slice-name").textContent = `${sliceName(state.slice)} (${state.slice + 1} of ${count}), ${metric.label} ${plain(value)}${unit}`;
  $("v-slice").setAttribute("aria-valuetext", $("v-slice-name").textContent);
}

function goTo(position, spoken = true) {
  const last = scan().slices.length - 1;
  state.slice = Math.max(0, Math.min(last, position));
  $("v-slice").value = state.slice;
  if (spoken) say(`slice ${sliceName(state.slice)}`);
  refresh();
}

function setZoom(zoom, at) {
  const before = state.zoom;
  state.zoom = Math.max(1, Math.min(16, zoom));
  if (at && state.zoom !== before) {
    const keep = 1 - before / state.zoom;
    state.centre = state.centre.map((c, i) => c + (at[i] - c) * keep);
  }
  if (state.zoom === 1) state.centre = [0.5, 0.5];
  clampCentre();
  $("v-zoom-name").textContent = `${plain(state.zoom, 2)}×`;
  refresh();
}

function clampCentre() {
  const half = 0.5 / state.zoom;
  state.centre = state.centre.map((c) => Math.max(half, Math.min(1 - half, c)));
}

function setWindow(low, high, preset = "own") {
  if (!Number.isFinite(low) || !Number.isFinite(high)) return;
  state.windows[state.scan] = [low, Math.max(high, low + scan().step)];
  const digits = Math.max(0, 2 - Math.floor(Math.log10(scan().largest || 1)));
  $("v-low").value = low.toFixed(digits);
  $("v-high").value = state.windows[state.scan][1].toFixed(digits);
  $("v-preset").value = preset;
  refresh();
}

function usePreset(name) {
  const [, high] = scan().window;
  const ends = { body: scan().window, full: [0, scan().largest], dark: [0, 0.4 * high], bright: [0.4 * high, 1.1 * high] };
  if (ends[name]) setWindow(...ends[name], name);
}

function useFactor(factor) {
  state.factor = factor;
  $("v-factor").value = factor;
  refresh();
}

function useMode(mode) {
  state.mode = mode;
  state.turn = 0;
  document.querySelector(`input[name="v-mode"][value="${mode}"]`).checked = true;
  say({ side: "side by side", flip: "alternate, reference", swipe: "swipe", overlay: "error on image" }[mode]);
  refresh();
}

function flip() {
  if (state.mode !== "flip") {
    useMode("flip");
    return;
  }
  state.turn = (state.turn + 1) % (state.other ? 3 : 2);
  refresh();
  say(plan()[0][0]);
}

function useScan(number) {
  state.scan = number;
  state.probe = null;
  const s = scan();
  const here = study.arms.filter((a) => s.images.some((i) => i.arm === a.id));
  const names = here.map((a) => [a.id, a.today ? `${a.label} (in use today)` : a.label]);
  if (!here.some((a) => a.id === state.arm)) {
    state.arm = (here.find((a) => a.id === study.chosen) || here.find((a) => !a.today) || here[0]).id;
  }
  if (!here.some((a) => a.id === state.other)) state.other = "";
  fill($("v-arm"), names, state.arm);
  fill($("v-other"), [["", "reference alone"], ...names], state.other);
  const draws = [...new Set(s.images.map((i) => i.draw))].sort((a, b) => a - b);
  state.draw = draws.includes(state.draw) ? state.draw : draws[0];
  fill($("v-draw"), draws.map((d) => [d, d]), state.draw);
  $("v-draw-label").hidden = draws.length < 2;
  const kinds = [...new Map(s.maps.map((m) => [m.kind, m.label]))];
  if (!kinds.some(([kind]) => kind === state.map)) state.map = "";
  fill($("v-map"), [["", "none"], ...kinds], state.map);
  $("v-map-label").hidden = kinds.length === 0;
  const features = [...new Map(s.features.map((f) => [f.number, f.label]))].sort(([a], [b]) => a - b);
  if (!features.some(([n]) => n === state.feature)) state.feature = 0;
  fill($("v-feature"), [[0, "none"], ...features], state.feature);
  $("v-features").hidden = features.length === 0;
  $("v-slice").max = s.slices.length - 1;
  $("v-slice").disabled = s.slices.length < 2;
  const [low, high] = state.windows[number];
  setWindow(low, high, low === s.window[0] && high === s.window[1] ? "body" : "own");
  goTo(ranked(state.arm)[0] ?? Math.floor(s.slices.length / 2), false);
}

// Pointer position as (row, column) of the slice and as a share of the canvas.
function placeOf(event) {
  const canvas = event.target.closest("canvas");
  if (!canvas) return null;
  const box = canvas.getBoundingClientRect();
  const across = (event.clientX - box.left) / box.width;
  const down = (event.clientY - box.top) / box.height;
  const s = scan();
  const rect = viewRect(s.rows, s.columns, state.zoom, state.centre);
  const clamp = (v, n) => Math.max(0, Math.min(n - 1, Math.floor(v)));
  return {
    across, down, box, rect,
    row: clamp(rect.top + down * rect.height, s.rows),
    column: clamp(rect.left + across * rect.width, s.columns),
  };
}

let drag = null;

function startDrag(event) {
  const place = placeOf(event);
  if (!place || (event.button !== 0 && event.button !== 1)) return;
  event.preventDefault();
  stage.focus({ preventScroll: true });
  const moving = event.shiftKey || event.button === 1;
  const kind = moving ? "move" : state.mode === "swipe" ? "edge" : "window";
  drag = { kind, x: event.clientX, y: event.clientY, centre: [...state.centre], window: [...state.windows[state.scan]], place };
  event.target.setPointerCapture(event.pointerId);
  if (kind === "edge") moveEdge(place.across);
}

function moveEdge(share) {
  state.edge = Math.max(0, Math.min(1, share));
  refresh();
}

function movePointer(event) {
  const place = placeOf(event);
  if (!drag) {
    if (place) {
      state.probe = [place.row, place.column];
      refresh();
    }
    return;
  }
  const across = (event.clientX - drag.x) / drag.place.box.width;
  const down = (event.clientY - drag.y) / drag.place.box.height;
  if (drag.kind === "edge" && place) moveEdge(place.across);
  if (drag.kind === "move") {
    state.centre = [drag.centre[0] - across / state.zoom, drag.centre[1] - down / state.zoom];
    clampCentre();
    refresh();
  }
  if (drag.kind === "window") {
    const [low, high] = drag.window;
    const width = Math.max(scan().step, (high - low) * 2 ** (2 * across));
    const middle = (low + high) / 2 - down * (scan().window[1] - scan().window[0]);
    setWindow(middle - width / 2, middle + width / 2);
  }
}

let turned = 0;

function wheel(event) {
  const place = placeOf(event);
  if (!place) return;
  if (event.ctrlKey || event.metaKey) {
    event.preventDefault();
    const at = [(place.column + 0.5) / scan().columns, (place.row + 0.5) / scan().rows];
    setZoom(state.zoom * 2 ** (-event.deltaY / 200), at);
    return;
  }
  const step = Math.sign(event.deltaY);
  const next = state.slice + step;
  // At the first and the last slice the page scrolls on.
  if (next < 0 || next >= scan().slices.length) return;
  event.preventDefault();
  turned = Math.sign(turned) === step ? turned + event.deltaY : event.deltaY;
  if (Math.abs(turned) < 40) return;
  turned = 0;
  goTo(next, false);
}

function moveProbe(down, across) {
  const s = scan();
  const [row, column] = state.probe || [s.rows >> 1, s.columns >> 1];
  state.probe = [Math.max(0, Math.min(s.rows - 1, row + down)), Math.max(0, Math.min(s.columns - 1, column + across))];
  const rect = viewRect(s.rows, s.columns, state.zoom, state.centre);
  const [r, c] = state.probe;
  if (c < rect.left || c >= rect.left + rect.width || r < rect.top || r >= rect.top + rect.height) {
    state.centre = [(c + 0.5) / s.columns, (r + 0.5) / s.rows];
    clampCentre();
  }
  refresh();
  requestAnimationFrame(() => requestAnimationFrame(() => say($("v-read").textContent)));
}

function sideways(step) {
  if (state.mode === "swipe") {
    moveEdge(state.edge + 0.02 * step);
    return;
  }
  const options = [...$("v-arm").options].map((o) => o.value);
  const at = (options.indexOf(state.arm) + step + options.length) % options.length;
  state.arm = options[at];
  $("v-arm").value = state.arm;
  say(armName(state.arm));
  refresh();
}

function scaleWindow(width, shift) {
  const [low, high] = state.windows[state.scan];
  const middle = (low + high) / 2 + shift * (high - low);
  const half = (high - low) / 2 * width;
  setWindow(middle - half, middle + half);
}

const KEYS = {
  ArrowUp: () => goTo(state.slice + 1), ArrowDown: () => goTo(state.slice - 1),
  PageUp: () => goTo(state.slice + 5), PageDown: () => goTo(state.slice - 5),
  Home: () => goTo(0), End: () => goTo(scan().slices.length - 1),
  ArrowLeft: () => sideways(-1), ArrowRight: () => sideways(1), " ": flip,
  1: () => useMode("side"), 2: () => useMode("flip"), 3: () => useMode("swipe"), 4: () => useMode("overlay"),
  f: () => nextSite(1), w: () => goToRanked(0), m: () => goToRanked(0.5),
  e: () => useFactor(FACTORS[(FACTORS.indexOf(state.factor) + 1) % FACTORS.length]),
  "[": () => scaleWindow(0.8, 0), "]": () => scaleWindow(1.25, 0),
  ",": () => scaleWindow(1, 0.05), ".": () => scaleWindow(1, -0.05),
  "+": () => setZoom(state.zoom * 1.5), "=": () => setZoom(state.zoom * 1.5),
  "-": () => setZoom(state.zoom / 1.5), 0: () => setZoom(1),
};
const PROBE_KEYS = { ArrowUp: [-1, 0], ArrowDown: [1, 0], ArrowLeft: [0, -1], ArrowRight: [0, 1] };

function key(event) {
  if (event.ctrlKey || event.metaKey || event.altKey) return;
  if (event.shiftKey && PROBE_KEYS[event.key]) {
    event.preventDefault();
    moveProbe(...PROBE_KEYS[event.key]);
    return;
  }
  const act = KEYS[event.key] || KEYS[event.key.toLowerCase()];
  if (!act) return;
  event.preventDefault();
  act();
}

function goToRanked(share) {
  const order = ranked(state.arm);
  if (order.length) goTo(order[Math.floor(share * order.length)]);
}

// Put a feature into the images and go to its first site.
function useFeature(number) {
  state.feature = number;
  state.site = -1;
  $("v-feature").value = number;
  if (number) nextSite(1);
  else setZoom(1);
}

function nextSite(step) {
  const facts = featureOf(state.arm);
  if (!facts) {
    const first = scan().features.find((f) => f.arm === state.arm);
    if (first && !state.feature) useFeature(first.number);
    else say("This feature was not inserted for this arm.");
    refresh();
    return;
  }
  state.site = (state.site + step + facts.sites.length) % facts.sites.length;
  const site = facts.sites[state.site];
  state.zoom = Math.max(state.zoom, 3);
  state.centre = [(site.column + 0.5) / scan().columns, (site.row + 0.5) / scan().rows];
  setZoom(state.zoom);
  goTo(site.slice, false);
  say(`site ${state.site + 1}: ${Math.round(100 * site.kept)} % kept`);
}

// Some maps are measured in few slices: go to the nearest one that has values.
async function showMeasured() {
  refresh();
  const facts = mapOf(state.arm);
  if (!facts) return;
  const numbers = await numbersOf(facts);
  const size = scan().rows * scan().columns;
  const filled = scan().slices
    .map((_, i) => i)
    .filter((i) => numbers.subarray(i * size, (i + 1) * size).some((n) => n > 0));
  if (!filled.length || filled.includes(state.slice)) return;
  goTo(filled.reduce((a, b) => (Math.abs(b - state.slice) < Math.abs(a - state.slice) ? b : a)));
}

// A slice that a table names; the nearest one held where the page holds only some.
function showSlice({ scan: name, arm, draw, plane, frame }) {
  const number = study.scans.findIndex((s) => s.id === name);
  if (number < 0 || !study.scans[number].images.some((i) => i.arm === arm)) {
    say("No image of this slice is stored.");
    return;
  }
  state.arm = arm;
  state.draw = Number(draw);
  $("v-scan").value = number;
  useScan(number);
  const far = (s) => Math.abs(s.plane - Number(plane)) + 1e6 * Math.abs(s.frame - Number(frame));
  const distances = scan().slices.map(far);
  goTo(distances.indexOf(Math.min(...distances)));
  $("look").scrollIntoView();
  stage.focus({ preventScroll: true });
}

function startViewer() {
  fill($("v-scan"), study.scans.map((s, n) => [n, s.name]), 0);
  fill($("v-metric"), study.metrics.map((m) => [m.key, m.label]), state.metric);
  fill($("v-factor"), FACTORS.map((f) => [f, `×${f}`]), state.factor);
  const on = (id, type, act) => $(id).addEventListener(type, act);
  on("v-scan", "change", (e) => useScan(Number(e.target.value)));
  on("v-arm", "change", (e) => { state.arm = e.target.value; refresh(); });
  on("v-other", "change", (e) => { state.other = e.target.value; state.turn = 0; refresh(); });
  on("v-draw", "change", (e) => { state.draw = Number(e.target.value); refresh(); });
  on("v-map", "change", (e) => { state.map = e.target.value; showMeasured(); });
  on("v-feature", "change", (e) => useFeature(Number(e.target.value)));
  on("v-site", "click", () => nextSite(1));
  on("v-metric", "change", (e) => { state.metric = e.target.value; refresh(); });
  on("v-slice", "input", (e) => goTo(Number(e.target.value), false));
  on("v-worst", "click", () => goToRanked(0));
  on("v-median", "click", () => goToRanked(0.5));
  on("v-curve", "click", (e) => {
    const box = $("v-curve").getBoundingClientRect();
    goTo(Math.round((e.clientX - box.left) / box.width * (scan().slices.length - 1)));
  });
  on("v-low", "change", () => setWindow($("v-low").valueAsNumber, $("v-high").valueAsNumber));
  on("v-high", "change", () => setWindow($("v-low").valueAsNumber, $("v-high").valueAsNumber));
  on("v-preset", "change", (e) => usePreset(e.target.value));
  on("v-factor", "change", (e) => useFactor(Number(e.target.value)));
  on("v-zoom-in", "click", () => setZoom(state.zoom * 1.5));
  on("v-zoom-out", "click", () => setZoom(state.zoom / 1.5));
  on("v-fit", "click", () => setZoom(1));
  for (const radio of document.querySelectorAll('input[name="v-mode"]')) {
    radio.addEventListener("change", () => useMode(radio.value));
  }
  stage.addEventListener("pointerdown", startDrag);
  stage.addEventListener("pointermove", movePointer);
  stage.addEventListener("pointerup", () => { drag = null; });
  stage.addEventListener("pointercancel", () => { drag = null; });
  stage.addEventListener("pointerleave", () => { if (!drag) { state.probe = null; refresh(); } });
  stage.addEventListener("wheel", wheel, { passive: false });
  stage.addEventListener("keydown", key);
  for (const button of document.querySelectorAll("button.show")) {
    button.addEventListener("click", () => showSlice(button.dataset));
  }
  $("viewer").hidden = false;
  useScan(0);
}

startViewer();
