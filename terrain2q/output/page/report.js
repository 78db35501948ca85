(() => {
"use strict";

const data = JSON.parse(document.getElementById("data").textContent);
const { sections, events, fields, units, looks } = data;
const SVG = "http://www.w3.org/2000/svg";
const INK = "#2b2622", WALL = "#8c2d19", DEEP = looks.waters[4], QUIET = "#5d544b", GRID = "#ddd6cc";
const DASHES = ["", "7 3", "3 2.5", "8 3 2 3", "1.5 2"];
const STATUSES = ["ok", "doubtful", "failed"];
const DASH = "–";
const byId = (id) => document.getElementById(id);
const numberOf = new Map(sections.map((s, i) => [s.id, i]));
const column = new Map(fields.map((f, i) => [f.name, i]));

const state = { event: Math.max(events.length - 1, 0), shown: 0, chosen: -1 };

// ------------------------------------------------------------------------------------------------
// Small tools

function add(parent, name, attributes = {}, text) {
  const node = parent.namespaceURI === SVG || name === "svg"
    ? document.createElementNS(SVG, name) : document.createElement(name);
  for (const [key, value] of Object.entries(attributes)) {
    if (value !== null && value !== undefined && value !== false) node.setAttribute(key, value);
  }
  if (text !== undefined) node.textContent = text;
  parent.appendChild(node);
  return node;
}

function number(value, decimals) {
  return value === null || value === undefined ? DASH : value.toFixed(decimals);
}

function withUnit(field) {
  return field.unit ? `${field.title} [${field.unit}]` : field.title;
}

/** The number of a section at an event; null where there is none. */
function answer(section, event, name) {
  const at = section.events[event];
  return at && column.has(name) ? at.numbers[column.get(name)] : null;
}

function told(section, event, name) {
  return column.has(name) ? number(answer(section, event, name), fields[column.get(name)].decimals) : DASH;
}

function mark(parent, status) {
  return add(parent, "span", { class: `mark ${status}` }, status);
}

/** Round numbers from low to high, about `count` of them. */
function ticks(low, high, count) {
  const raw = (high - low) / Math.max(count, 1);
  if (!(raw > 0)) return [low];
  const power = 10 ** Math.floor(Math.log10(raw));
  const step = power * [1, 2, 2.5, 5, 10].find((m) => m * power >= raw * 0.999);
  const found = [];
  for (let i = Math.ceil(low / step - 1e-9); i * step <= high + 1e-9 * step; i += 1) found.push(i * step);
  return found;
}

function tickText(value, all) {
  const step = all.length > 1 ? all[1] - all[0] : Math.abs(value) || 1;
  const decimals = Math.max(0, Math.ceil(-Math.log10(step) - 1e-9));
  const needs = Math.abs(step * 10 ** decimals - Math.round(step * 10 ** decimals)) > 1e-6 ? decimals + 1 : decimals;
  return value.toFixed(needs);
}

/** Clear a picture and give it its size; returns the width to draw in. */
function sheet(svg, height) {
  const width = Math.max(Math.round(svg.parentNode.clientWidth), 260);
  svg.replaceChildren();
  svg.setAttribute("viewBox", `0 0 ${width} ${height}`);
  return width;
}

function interpolate(xs, ys, x) {
  if (x <= xs[0]) return ys[0];
  for (let i = 1; i < xs.length; i += 1) {
    if (x <= xs[i]) {
      const span = xs[i] - xs[i - 1];
      return span ? ys[i - 1] + ((ys[i] - ys[i - 1]) * (x - xs[i - 1])) / span : ys[i];
    }
  }
  return ys[ys.length - 1];
}

/** Axes with their words; returns the ways from numbers to places. */
function axes(svg, box, across, up, words) {
  const x = (v) => box.left + ((v - across[0]) / (across[1] - across[0] || 1)) * (box.right - box.left);
  const y = (v) => box.bottom - ((v - up[0]) / (up[1] - up[0] || 1)) * (box.bottom - box.top);
  const group = add(svg, "g", { "font-size": 11, fill: QUIET });
  const rows = ticks(up[0], up[1], Math.max(2, Math.floor((box.bottom - box.top) / 34)));
  for (const v of rows) {
    if (words.grid) add(group, "path", { d: `M${box.left} ${y(v)}H${box.right}`, stroke: GRID });
    add(group, "text", { x: box.left - 5, y: y(v) + 3.5, "text-anchor": "end" }, tickText(v, rows));
  }
  const columns = ticks(across[0], across[1], Math.max(2, Math.floor((box.right - box.left) / 85)));
  for (const v of columns) {
    if (words.grid) add(group, "path", { d: `M${x(v)} ${box.top}V${box.bottom}`, stroke: GRID });
    else add(group, "path", { d: `M${x(v)} ${box.bottom}v4`, stroke: QUIET });
    add(group, "text", { x: x(v), y: box.bottom + 15, "text-anchor": "middle" }, tickText(v, columns));
  }
  add(group, "path", { d: `M${box.left} ${box.top}V${box.bottom}H${box.right}`, fill: "none", stroke: QUIET });
  add(group, "text", { x: box.right, y: box.bottom + 30, "text-anchor": "end" }, words.x);
  add(group, "text", { x: 2, y: box.top - 8 }, words.y);
  return { x, y };
}

// ------------------------------------------------------------------------------------------------
// The map

const map = byId("map");
const mapLines = [];
const view = { x: 0, y: 0, width: data.map.width, height: data.map.height };
let mapLabels, mapExtent, mapLow;

function buildMap() {
  const { width, height } = data.map;
  if (!width) {
    map.parentNode.parentNode.hidden = true;
    return;
  }
  const shaded = byId("hillshade");
  if (shaded) {
    shaded.setAttribute("width", width);
    shaded.setAttribute("height", height);
  }
  const defs = add(map, "defs");
  const hatch = add(defs, "pattern", { id: "low-hatch", width: 60, height: 60, patternUnits: "userSpaceOnUse", patternTransform: "rotate(45)" });
  add(hatch, "rect", { width: 60, height: 60, fill: looks.waters[0], "fill-opacity": 0.45 });
  add(hatch, "rect", { width: 16, height: 60, fill: looks.waters[2] });
  mapExtent = add(map, "path", { class: "extent", "fill-rule": "evenodd", "aria-hidden": "true" });
  mapLow = add(map, "path", { class: "low", "fill-rule": "evenodd", "aria-hidden": "true" });
  const water = add(map, "g", { "aria-hidden": "true" });
  for (const stream of data.map.streams) add(water, "path", { class: "stream", d: stream.d });
  for (const stream of data.map.streams) add(water, "path", { class: "stream over", d: stream.d });
  for (const line of data.map.lines) {
    const section = sections[line.section];
    const group = add(map, "g", { class: `line ${section.status}`, role: "radio", "aria-checked": "false", tabindex: -1 });
    add(group, "path", { class: "case", d: line.d });
    add(group, "path", { class: "cut", d: line.d });
    const wet = add(group, "path", { class: "wet" });
    add(group, "path", { class: "hit", d: line.d });
    group.addEventListener("pointerenter", (e) => { if (e.pointerType === "mouse" && !drag) show(line.section); });
    group.addEventListener("pointerleave", (e) => { if (e.pointerType === "mouse" && state.chosen >= 0) show(state.chosen); });
    group.addEventListener("click", () => choose(line.section));
    group.addEventListener("focus", () => choose(line.section));
    group.addEventListener("keydown", moveByKey);
    mapLines[line.section] = { group, wet, line };
  }
  for (const place of data.map.crossings) drawCrossing(place);
  mapLabels = add(map, "g", { "aria-hidden": "true" });
  drawFurniture();
  setView();
  map.addEventListener("wheel", (e) => {
    if (!e.ctrlKey) return;
    e.preventDefault();
    zoom(e.deltaY < 0 ? 1.25 : 0.8, toMap(e));
  }, { passive: false });
  map.addEventListener("pointerdown", startDrag);
  for (const button of document.querySelectorAll("[data-zoom]")) {
    button.addEventListener("click", () => {
      const how = button.dataset.zoom;
      if (how === "all") zoom(0, null);
      else zoom(how === "in" ? 1.6 : 1 / 1.6, null);
    });
  }
  mapKey();
}

function toMap(event) {
  const box = map.getBoundingClientRect();
  return { x: view.x + ((event.clientX - box.left) / box.width) * view.width,
           y: view.y + ((event.clientY - box.top) / box.height) * view.height };
}

let drag = null;
function startDrag(event) {
  if (view.width >= data.map.width - 1 || event.button) return;
  drag = { id: event.pointerId, x: event.clientX, y: event.clientY, from: { ...view } };
  const move = (e) => {
    if (e.pointerId !== drag.id) return;
    const box = map.getBoundingClientRect();
    view.x = drag.from.x - ((e.clientX - drag.x) / box.width) * view.width;
    view.y = drag.from.y - ((e.clientY - drag.y) / box.height) * view.height;
    setView();
  };
  const end = () => {
    drag = null;
    window.removeEventListener("pointermove", move);
    window.removeEventListener("pointerup", end);
    window.removeEventListener("pointercancel", end);
  };
  window.addEventListener("pointermove", move);
  window.addEventListener("pointerup", end);
  window.addEventListener("pointercancel", end);
}

/** Make the map larger about a place; 0 shows the whole. Without a place, about the section shown. */
function zoom(factor, about) {
  const { width, height } = data.map;
  if (!factor) Object.assign(view, { x: 0, y: 0, width, height });
  else {
    const line = mapLines[state.shown];
    const inside = line && about === null && middleOf(line.line);
    const at = about || inside || { x: view.x + view.width / 2, y: view.y + view.height / 2 };
    const next = Math.min(width, Math.max(width / 40, view.width / factor));
    const share = about ? next / view.width : null;
    view.x = share === null ? at.x - next / 2 : at.x - (at.x - view.x) * share;
    view.y = share === null ? at.y - (next * height) / width / 2 : at.y - (at.y - view.y) * share;
    view.width = next;
    view.height = (next * height) / width;
  }
  setView();
}

function middleOf(line) {
  const [x1, y1, x2, y2] = line.ends;
  return { x: (x1 + x2) / 2, y: (y1 + y2) / 2 };
}

function setView() {
  view.x = Math.min(Math.max(view.x, 0), data.map.width - view.width);
  view.y = Math.min(Math.max(view.y, 0), data.map.height - view.height);
  map.setAttribute("viewBox", `${view.x} ${view.y} ${view.width} ${view.height}`);
  map.classList.toggle("large", view.width < data.map.width - 1);
  for (const place of data.map.crossings) paintCrossing(place);
  drawLabels();
  drawFurniture();
}

/** Map units in one pixel of the screen. */
function perPixel() {
  return view.width / Math.max(map.getBoundingClientRect().width, 1);
}

/** Write ids at the right ends of lines, as many as there is room for, the section shown first. */
function drawLabels() {
  if (!mapLabels) return;
  mapLabels.replaceChildren();
  const unit = perPixel(), taken = reserved(unit);
  const order = data.map.lines.map((l) => l.section).filter((i) => i !== state.shown);
  for (const i of [state.shown, ...order]) {
    if (!mapLines[i]) continue;
    const { line } = mapLines[i];
    const [x1, y1, x2, y2] = line.ends;
    const length = Math.hypot(x2 - x1, y2 - y1) || 1;
    const wide = sections[i].id.length * 6.6 + 4;
    const ux = (x2 - x1) / length, uy = (y2 - y1) / length;
    for (const [x, y, dx, dy] of [[x2, y2, ux, uy], [x1, y1, -ux, -uy]]) {
      const cx = x + dx * (wide / 2 + 5) * unit, cy = y + dy * 12 * unit;
      const box = [cx - (wide / 2) * unit, cy - 7 * unit, cx + (wide / 2) * unit, cy + 7 * unit];
      const outside = box[0] < view.x || box[1] < view.y || box[2] > view.x + view.width || box[3] > view.y + view.height;
      if (outside || taken.some((t) => box[0] < t[2] && box[2] > t[0] && box[1] < t[3] && box[3] > t[1])) continue;
      taken.push(box);
      add(mapLabels, "text", { x: cx, y: cy + 4 * unit, "text-anchor": "middle", "font-size": 11.5 * unit,
        "stroke-width": 3 * unit, "font-weight": i === state.shown ? 700 : 400 }, sections[i].id);
      break;
    }
  }
}

/** Corners that hold the scale bar, the arrow to the north and the buttons. */
function reserved(unit) {
  const right = view.x + view.width, bottom = view.y + view.height;
  const corners = [[right - 150 * unit, view.y, right, view.y + 44 * unit], [view.x, view.y, view.x + 30 * unit, view.y + 58 * unit]];
  if (data.map.bar) corners.push([view.x, bottom - 36 * unit, view.x + view.width * 0.24 + 20 * unit, bottom]);
  return corners;
}

let furniture;
function drawFurniture() {
  if (!furniture) furniture = add(map, "g", { "aria-hidden": "true" });
  furniture.replaceChildren();
  const unit = perPixel(), { bar } = data.map;
  const left = view.x + 12 * unit, low = view.y + view.height - 14 * unit;
  if (bar) {
    const length = niceBar(bar, view.width * 0.24);
    add(furniture, "path", { d: `M${left} ${low}h${length.units}`, stroke: "#fff", "stroke-width": 7 });
    add(furniture, "path", { d: `M${left} ${low - 4 * unit}v${8 * unit}m0 ${-4 * unit}h${length.units}m0 ${-4 * unit}v${8 * unit}`, stroke: INK, "stroke-width": 1.6, fill: "none" });
    add(furniture, "text", { x: left + length.units / 2, y: low - 7 * unit, "text-anchor": "middle", "font-size": 11 * unit, "stroke-width": 3 * unit }, length.text);
  }
  const x = view.x + 16 * unit, y = view.y + 14 * unit;
  add(furniture, "path", { d: `M${x} ${y + 26 * unit}V${y}m${-5 * unit} ${9 * unit}l${5 * unit} ${-9 * unit} ${5 * unit} ${9 * unit}`, stroke: INK, fill: "none", "stroke-width": 1.6 });
  add(furniture, "text", { x, y: y + 39 * unit, "text-anchor": "middle", "font-size": 11 * unit, "stroke-width": 3 * unit }, "N");
}

/** The scale bar for the part shown: a round length below what there is room for. */
function niceBar(bar, room) {
  const [value, unit] = [parseFloat(bar.text), bar.text.split(" ")[1]];
  const each = value / bar.length;
  const power = 10 ** Math.floor(Math.log10(room * each));
  const length = [5, 2, 1].find((m) => m * power <= room * each) * power;
  return { units: length / each, text: `${+length.toPrecision(3)} ${unit}` };
}

// the mark of each verdict: pale, middle and dark, so that they differ in grey too
const VERDICTS = { "crest not reached": "#ffffff", "within freeboard": "#d9a441", "over the crest": WALL };
const UNJUDGED = "#b9b2a8";

function verdictOf(id) {
  const entry = data.crossings.find((c) => c.id === id);
  const row = entry && entry.rows[state.event];
  const at = data.tables.crossings.findIndex((c) => c.name === "verdict");
  return (row && at >= 0 && row[at]) || "";
}

function drawCrossing(place) {
  place.node = add(map, "path", { class: "crossing", "aria-hidden": "true" });
  place.title = add(place.node, "title");
  place.node.addEventListener("click", () => goToCrossing(place.id));
}

function paintCrossing(place) {
  const r = 8 * perPixel(), verdict = verdictOf(place.id);
  place.node.setAttribute("d", `M${place.x} ${place.y - r}l${r} ${r} ${-r} ${r} ${-r} ${-r}z`);
  place.node.setAttribute("fill", VERDICTS[verdict] || UNJUDGED);
  place.title.textContent = `Crossing ${place.id}: ${verdict || "no verdict"}`;
}

function goToCrossing(id) {
  const row = document.querySelector(`#crossings-table [data-crossing="${CSS.escape(id)}"]`);
  if (!row) return;
  for (const other of row.parentNode.children) other.classList.toggle("chosen", other === row);
  row.scrollIntoView({ block: "center" });
}

/** Bring a crossing to the middle of the map. */
function toCrossing(id) {
  const place = data.map.crossings.find((c) => c.id === id);
  if (!place) return;
  const width = Math.min(view.width, data.map.width / 4);
  Object.assign(view, { width, height: (width * data.map.height) / data.map.width });
  view.x = place.x - view.width / 2;
  view.y = place.y - view.height / 2;
  setView();
  for (const one of data.map.crossings) one.node.classList.toggle("chosen", one === place);
  map.scrollIntoView({ block: "center" });
}

function mapKey() {
  const key = byId("map-key");
  const entry = (style, words) => {
    const holder = add(key, "span");
    const sample = add(holder, "svg", { viewBox: "0 0 30 14", "aria-hidden": "true" });
    add(sample, "path", { d: style.d || "M1 7H29", fill: "none", ...style });
    holder.append(words);
  };
  const there = new Set(sections.map((s) => s.status));
  if (there.has("ok") || there.has("")) entry({ stroke: INK, "stroke-width": 2 }, "cut line");
  if (there.has("doubtful")) entry({ stroke: "#7d4f00", "stroke-width": 2, "stroke-dasharray": "7 4" }, "doubtful at an event");
  if (there.has("failed")) entry({ stroke: WALL, "stroke-width": 2, "stroke-dasharray": "2 4" }, "without an answer at an event");
  if (events.length) entry({ stroke: DEEP, "stroke-width": 4 }, "under water");
  if (data.map.streams.length) entry({ stroke: looks.waters[3], "stroke-width": 2 }, "stream, flowing downstream");
  if (data.map.extents.length) entry({ d: "M1 2H29V12H1Z", fill: looks.waters[2], "fill-opacity": 0.7, stroke: DEEP }, "flood extent");
  if (data.map.low.some(Boolean)) entry({ d: "M1 2H29V12H1Z", fill: looks.waters[0], stroke: DEEP, "stroke-dasharray": "2 2" }, "low ground the stream does not reach");
  if (data.map.crossings.length) {
    const diamond = "M15 1l6 6-6 6-6-6z";
    for (const [verdict, fill] of Object.entries(VERDICTS)) entry({ d: diamond, fill, stroke: INK }, `crossing: ${verdict}`);
  }
}

function moveByKey(event) {
  const order = data.map.lines.map((l) => l.section);
  const at = order.indexOf(state.shown);
  const steps = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 };
  let next = null;
  if (event.key in steps) next = order[(at + steps[event.key] + order.length) % order.length];
  else if (event.key === "Home") next = order[0];
  else if (event.key === "End") next = order[order.length - 1];
  else if (event.key === " " || event.key === "Enter") next = order[at];
  if (next === null) return;
  event.preventDefault();
  choose(next);
  mapLines[next].group.focus();
}

function paintMap() {
  if (!data.map.width) return;
  const event = state.event;
  if (events.length) byId("map-title").textContent = `Map, at ${events[event].name}`;
  const extent = data.map.extents[event] || "";
  mapExtent.setAttribute("d", extent);
  const note = byId("map-note");
  note.hidden = !data.map.extents.length || Boolean(extent);
  if (!note.hidden) note.textContent = `No flood extent was mapped at ${events[event].name}.`;
  if (events.length) mapExtent.setAttribute("fill", events[event].tone);
  mapLow.setAttribute("d", data.map.low[event] || "");
  mapLines.forEach(({ group, wet, line }, i) => {
    const section = sections[i];
    const at = section.events[event];
    wet.setAttribute("d", line.wet[event] || "");
    const chosen = i === state.shown;
    group.classList.toggle("chosen", chosen);
    group.setAttribute("aria-checked", String(chosen));
    group.setAttribute("tabindex", chosen ? 0 : -1);
    const words = at ? `${events[event].name}: stage ${told(section, event, "stage")} ${units.length}, ${at.status}` : "";
    group.setAttribute("aria-label", `Section ${section.id}${words ? `, ${words}` : ""}`);
  });
  for (const place of data.map.crossings) paintCrossing(place);
  drawLabels();
}

// ------------------------------------------------------------------------------------------------
// The panel of one section

function paintPanel() {
  const section = sections[state.shown];
  if (!section) {
    byId("panel").hidden = true;
    return;
  }
  byId("panel-title").textContent = `Section ${section.id}`;
  const facts = [];
  if (section.stream) facts.push(`${section.stream}${section.distance === null ? "" : `, ${section.distance} ${units.length} along it`}`);
  if (section.lowest !== null) facts.push(`lowest ground ${section.lowest.toFixed(2)} ${units.length}`);
  facts.push(`slope ${section.slope}${section.slope_source ? ` (${section.slope_source})` : ""}`);
  byId("panel-facts").textContent = facts.join("; ");
  paintEvents(section);
  drawSection(section);
  drawRating(section);
  paintSubareas(section);
}

/** All numbers of the section, one column an event, the one shown marked. */
function paintEvents(section) {
  const table = byId("panel-events");
  table.replaceChildren();
  if (!events.length) return;
  table.classList.toggle("tight", events.length > 3);
  const head = add(add(table, "thead"), "tr");
  add(head, "th", { scope: "col" }, "At the event");
  const order = events.map((_, i) => i);
  for (const i of order) {
    const cell = add(head, "th", { scope: "col", class: "number" });
    add(cell, "span", { class: "swatch", style: `background:${events[i].tone}` });
    cell.append(` ${events[i].name}`);
  }
  const body = add(table, "tbody");
  const status = add(body, "tr");
  add(status, "th", { scope: "row" }, "Status");
  for (const i of order) mark(add(status, "td", { class: "number" }), section.events[i].status);
  for (const field of fields) {
    if (field.name === "slope") continue;
    const row = add(body, "tr", { "data-field": field.name });
    add(row, "th", { scope: "row" }, withUnit(field));
    for (const i of order) {
      add(row, "td", { class: "number", "data-event": events[i].name,
        style: i === state.event ? "background:#fff3cf;font-weight:600" : null }, told(section, i, field.name));
    }
  }
}

function profileOf(section) {
  const xs = [], zs = [];
  for (let i = 0; i < section.profile.length; i += 2) {
    xs.push(section.profile[i]);
    zs.push(section.profile[i + 1]);
  }
  return { xs, zs };
}

/** Station and elevation pairs from one station to another, ends put in. */
function stretch({ xs, zs }, start, end) {
  const points = [[start, interpolate(xs, zs, start)]];
  xs.forEach((x, i) => { if (x > start && x < end) points.push([x, zs[i]]); });
  points.push([end, interpolate(xs, zs, end)]);
  return points;
}

const PATTERNS = [
  null, "M0 8L8 0M-2 2L2 -2M6 10L10 6", "M2 2h1.2M6 6h1.2", "M0 0L8 8M-2 6L2 10M6 -2L10 2", "M0 8L8 0M0 0L8 8", "M0 2H8M0 6H8",
  "M4 2.4a1.6 1.6 0 1 0 .01 0z",
];

/** The event shown and those with less water, the highest first. */
function notAbove(section) {
  const flow = (i) => answer(section, i, "discharge") ?? -1;
  return events.map((_, i) => i).filter((i) => i === state.event || flow(i) < flow(state.event))
    .sort((a, b) => flow(b) - flow(a));
}

let patternsMade = 0;
function drawSection(section) {
  const svg = byId("section-picture"), caption = byId("section-caption");
  const profile = profileOf(section);
  const event = events[state.event], at = section.events[state.event];
  if (profile.xs.length < 2) {
    sheet(svg, 20);
    caption.textContent = `Section ${section.id} has no ground that could be sampled.`;
    return;
  }
  const levels = section.events.flatMap((e) => e.water.map((w) => w[2]));
  const low = Math.min(...profile.zs), high = Math.max(...profile.zs, ...levels);
  const relief = Math.max(high - low, 1e-6), floor = low - 0.34 * relief, top = high + 0.06 * relief;
  const [start, end] = [profile.xs[0], profile.xs[profile.xs.length - 1]];
  const wide = Math.max(Math.round(svg.parentNode.clientWidth), 260);
  const box = { left: 46, right: wide - 8, top: 22 };
  const across = (box.right - box.left) / (end - start);
  const fits = (Math.min(260, Math.max(170, wide * 0.45)) / (top - floor)) / across;
  const times = looks.exaggerations.filter((e) => e <= fits).pop() || Number(fits.toPrecision(1));
  box.bottom = box.top + Math.max(across * times * (top - floor), 40);
  sheet(svg, box.bottom + 36);
  const { x, y } = axes(svg, box, [start, end], [floor, top], {
    x: `Station [${units.length}], left to right looking downstream`, y: `Elevation [${units.length}]` });
  const line = (points) => points.map(([s, z], i) => `${i ? "L" : "M"}${x(s).toFixed(1)} ${y(z).toFixed(1)}`).join("");
  // the water of the event shown, the lower ones before it; the levels of all as lines below
  for (const i of notAbove(section)) {
    for (const [from, to, stage] of section.events[i].water) {
      const ground = stretch(profile, from, to).map(([s, z]) => [s, Math.min(z, stage)]);
      add(svg, "path", { class: "water", d: `${line([[from, stage], ...ground, [to, stage]])}Z`, fill: events[i].tone });
    }
  }
  const defs = add(svg, "defs");
  section.subareas.forEach(([from, to, , , , , look], i) => {
    const ground = stretch(profile, Math.max(from, start), Math.min(to, end));
    const d = `${line([[ground[0][0], floor], ...ground, [ground[ground.length - 1][0], floor]])}Z`;
    add(svg, "path", { d, fill: looks.earths[look % looks.earths.length] });
    const hatch = PATTERNS[look % PATTERNS.length];
    if (hatch) {
      patternsMade += 1;
      const pattern = add(defs, "pattern", { id: `earth-${patternsMade}`, width: 8, height: 8, patternUnits: "userSpaceOnUse" });
      add(pattern, "path", { d: hatch, stroke: "#9b8a70", "stroke-width": hatch.includes("h1") ? 1.6 : 0.8, fill: "none" });
      add(svg, "path", { d, fill: `url(#earth-${patternsMade})` });
    }
    if (i) add(svg, "path", { d: `M${x(from)} ${y(floor)}V${y(ground[0][1])}`, stroke: "#3d3127", "stroke-width": 0.7 });
  });
  section.events.forEach((other, i) => {
    for (const [from, to, stage] of other.water) {
      add(svg, "path", { d: `M${x(from)} ${y(stage)}H${x(to)}`, stroke: DEEP, fill: "none",
        "stroke-width": i === state.event ? 1.8 : 0.9, "stroke-dasharray": i === state.event ? null : DASHES[1 + (i % 4)] });
    }
  });
  add(svg, "path", { d: line(profile.xs.map((s, i) => [s, profile.zs[i]])), fill: "none", stroke: "#3d3127",
    "stroke-width": 1.8, "stroke-linejoin": "round" });
  let walls = false;
  if (at) {
    for (const [from, to, stage] of at.water) {
      for (const [s, z] of [[start, profile.zs[0]], [end, profile.zs[profile.zs.length - 1]]]) {
        if ((Math.abs(s - from) < 0.02 || Math.abs(s - to) < 0.02) && stage > z + 0.01) {
          walls = true;
          add(svg, "path", { d: `M${x(s)} ${y(z)}V${y(stage)}`, stroke: WALL, "stroke-width": 3.2, "stroke-dasharray": "4 2.5" });
        }
      }
    }
  }
  for (const [from, to, , , n] of section.subareas) {
    const middle = x((Math.max(from, start) + Math.min(to, end)) / 2), room = x(to) - x(from);
    if (room < 15 || n === null) continue;
    const turned = room < 52;
    const deep = y(floor) - 6;
    add(svg, "text", { x: middle, y: deep, "font-size": 11, fill: INK, stroke: "#fff", "stroke-width": 3, "paint-order": "stroke",
      "text-anchor": turned ? "start" : "middle", transform: turned ? `rotate(-90 ${middle} ${deep}) translate(0 4)` : null }, `n ${n.toFixed(3)}`);
  }
  const parts = [`Section ${section.id}: the ground, its subareas with their n`];
  if (at) parts.push(at.water.length ? `and the water at ${event.name}, stage ${told(section, state.event, "stage")} ${units.length}` : `; no answer at ${event.name}`);
  if (section.events.some((e, i) => i !== state.event && e.water.length)) parts.push("(dashed: the other events)");
  if (walls) parts.push("; in red, the wall imagined where water stands above the end of the line");
  caption.textContent = `${parts.join(" ").replace(" ;", ";")}. Vertical scale ${times} times the horizontal.`;
}

function drawRating(section) {
  const svg = byId("rating-picture"), caption = byId("rating-caption");
  const flow = [], stage = [];
  for (let i = 0; i < section.rating.length; i += 2) {
    flow.push(section.rating[i]);
    stage.push(section.rating[i + 1]);
  }
  if (flow.length < 2) {
    sheet(svg, 20);
    caption.textContent = `Section ${section.id} has no rating.`;
    return;
  }
  const marks = section.events.map((e, i) => ({ i, name: events[i].name, flow: answer(section, i, "discharge"), stage: answer(section, i, "stage") }))
    .filter((m) => m.flow !== null && m.stage !== null).sort((a, b) => a.flow - b.flow);
  const most = marks.length ? 1.3 * marks[marks.length - 1].flow : flow[flow.length - 1];
  let highest = Math.max(interpolate(flow, stage, most), ...marks.map((m) => m.stage));
  highest = stage[0] + 1.06 * (highest - stage[0]) || stage[0] + 1;
  const height = 230, wide = sheet(svg, height);
  const box = { left: 46, right: wide - 12, top: 22, bottom: height - 36 };
  const { x, y } = axes(svg, box, [0, most], [stage[0], highest], { grid: true, x: `Discharge [${units.flow}]`, y: `Stage [${units.length}]` });
  const inside = add(add(svg, "defs"), "clipPath", { id: "rating-inside" });
  add(inside, "rect", { x: box.left, y: box.top, width: box.right - box.left, height: box.bottom - box.top });
  const curve = add(svg, "g", { fill: "none", stroke: looks.waters[3], "stroke-width": 2.2, "stroke-linejoin": "round", "clip-path": "url(#rating-inside)" });
  let run = `M${x(flow[0])} ${y(stage[0])}`, fills = false;
  for (let i = 1; i < flow.length; i += 1) {
    const to = `${x(flow[i]).toFixed(1)} ${y(stage[i]).toFixed(1)}`;
    if (stage[i] === stage[i - 1]) {
      fills = true;
      add(curve, "path", { d: `M${x(flow[i - 1])} ${y(stage[i - 1])}L${to}`, "stroke-dasharray": "4 3" });
      run += `M${to}`;
    } else run += `L${to}`;
  }
  add(curve, "path", { d: run });
  marks.forEach((m, order) => {
    const chosen = m.i === state.event;
    if (chosen) add(svg, "path", { d: `M${box.left} ${y(m.stage)}H${x(m.flow)}V${box.bottom}`, fill: "none", stroke: INK, "stroke-width": 0.8, "stroke-dasharray": "2 3" });
    add(svg, "circle", { cx: x(m.flow), cy: y(m.stage), r: chosen ? 5.5 : 4, fill: chosen ? INK : "#fff", stroke: INK, "stroke-width": 1.4 });
    const right = x(m.flow) > wide - 90;
    add(svg, "text", { x: x(m.flow) + (right ? -6 : 7), y: y(m.stage) + (right ? -9 : 17 + 12 * (order % 2)), "text-anchor": right ? "end" : "start",
      "font-size": 11.5, fill: INK, "font-weight": chosen ? 700 : 400, stroke: "#fff", "stroke-width": 3, "paint-order": "stroke" }, m.name);
  });
  caption.textContent = `Rating of section ${section.id}: stage against discharge` + (marks.length ? ", the events marked" : "")
    + (fills ? "; dashed where a hollow behind a bank fills" : "") + ".";
}

function paintSubareas(section) {
  const table = byId("panel-subareas");
  table.replaceChildren();
  if (!section.subareas.length) return;
  const at = section.events[state.event];
  add(table, "caption", {}, `Subareas${at ? ` and what flows in them at ${events[state.event].name}` : ""}`);
  const head = add(add(table, "thead"), "tr");
  const shown = at ? data.subarea_fields : [];
  for (const [text, numeric] of [["Subarea", 0], ["Zone", 0], ["Land class", 0], ["n", 1], [`From [${units.length}]`, 1], [`To [${units.length}]`, 1],
    ...shown.map((f) => [withUnit(f), 1])]) add(head, "th", { scope: "col", class: numeric ? "number" : null }, text);
  const body = add(table, "tbody");
  section.subareas.forEach(([from, to, zone, kind, n, source], i) => {
    const parts = at ? at.parts.filter((p) => p[0] === i + 1) : [];
    const rows = parts.length ? parts : [null];
    for (const part of rows) {
      const row = add(body, "tr");
      add(row, "th", { scope: "row" }, String(i + 1));
      add(row, "td", {}, zone || DASH);
      add(row, "td", { title: source }, kind || DASH);
      for (const [value, decimals] of [[n, n === null ? 3 : Math.max(3, String(n).length - 2)], [from, 1], [to, 1]]) {
        add(row, "td", { class: "number" }, number(value, Math.min(decimals, 4)));
      }
      shown.forEach((f, k) => add(row, "td", { class: "number" }, part ? number(part[k + 1], f.decimals) : DASH));
    }
  });
}

// ------------------------------------------------------------------------------------------------
// Long profile

function buildLong() {
  const select = byId("long-stream");
  if (!select) return;
  const streams = data.streams.filter((s) => sections.some((one) => one.stream === s && one.distance !== null));
  if (!streams.length) {
    byId("long").hidden = true;
    return;
  }
  for (const name of streams) add(select, "option", { value: name }, name);
  select.closest(".choose").hidden = streams.length < 2;
  select.addEventListener("change", drawLong);
}

function drawLong() {
  const select = byId("long-stream");
  if (!select || byId("long").hidden) return;
  const stream = select.value;
  const mine = sections.map((s, i) => ({ s, i })).filter(({ s }) => s.stream === stream && s.distance !== null && s.lowest !== null)
    .sort((a, b) => a.s.distance - b.s.distance);
  const svg = byId("long-picture"), height = 300, wide = sheet(svg, height);
  if (!mine.length) return;
  const names = wide < 500 ? 62 : 92;
  const box = { left: 50, right: wide - names, top: 22, bottom: height - 36 };
  const levels = mine.flatMap(({ s }) => [s.lowest, ...events.map((_, e) => answer(s, e, "stage")).filter((v) => v !== null)]);
  const low = Math.min(...levels), high = Math.max(...levels), room = 0.06 * (high - low || 1);
  const first = mine[0].s.distance, last = mine[mine.length - 1].s.distance;
  const spread = 0.02 * (last - first || 1);
  const { x, y } = axes(svg, box, [first - spread, last + spread], [low - room, high + room], {
    grid: true, x: `Distance along ${stream} [${units.length}]${wide < 500 ? "" : ", downstream to the right"}`, y: `Elevation [${units.length}]` });
  const ends = [];
  const draw = (values, attributes, name) => {
    let d = "", pen = false, end = null;
    mine.forEach(({ s }, k) => {
      const v = values[k];
      if (v === null) { pen = false; return; }
      d += `${pen ? "L" : "M"}${x(s.distance).toFixed(1)} ${y(v).toFixed(1)}`;
      pen = true;
      end = v;
    });
    add(svg, "path", { d, fill: "none", "stroke-linejoin": "round", ...attributes });
    if (end !== null) ends.push({ name, y: y(end), bold: attributes.bold });
  };
  const bed = mine.map(({ s }) => s.lowest);
  const flow = (e) => Math.max(...mine.map(({ s }) => answer(s, e, "discharge") ?? -1));
  const filled = events.map((_, e) => e).filter((e) => e === state.event || flow(e) < flow(state.event)).sort((a, b) => flow(b) - flow(a));
  for (const e of filled) {
    const level = mine.map(({ s }) => answer(s, e, "stage"));
    if (level.some((v) => v === null)) continue;
    const over = mine.map(({ s }, k) => `${k ? "L" : "M"}${x(s.distance)} ${y(level[k])}`).join("");
    const under = [...mine].reverse().map(({ s }) => `L${x(s.distance)} ${y(s.lowest)}`).join("");
    add(svg, "path", { d: `${over}${under}Z`, fill: events[e].tone });
  }
  draw(bed, { stroke: "#3d3127", "stroke-width": 2.4 }, "bed");
  events.forEach((event, e) => draw(mine.map(({ s }) => answer(s, e, "stage")),
    { stroke: DEEP, "stroke-width": e === state.event ? 2.2 : 1.1, "stroke-dasharray": e === state.event ? null : DASHES[1 + (e % 4)], bold: e === state.event ? 1 : null }, event.name));
  ends.sort((a, b) => a.y - b.y);
  ends.forEach((label, k) => { if (k) label.y = Math.max(label.y, ends[k - 1].y + 13); });
  for (let k = ends.length - 1, limit = height - 22; k >= 0; k -= 1, limit -= 13) ends[k].y = Math.min(ends[k].y, limit);
  for (const label of ends) add(svg, "text", { x: box.right + 5, y: label.y + 4, "font-size": 11.5, fill: INK, "font-weight": label.bold ? 700 : 400 }, label.name);
  for (const { s, i } of mine) {
    const shown = i === state.shown;
    if (shown) {
      add(svg, "path", { d: `M${x(s.distance)} ${box.top}V${box.bottom}`, stroke: "#b07800", "stroke-width": 1.4, "stroke-dasharray": "4 3" });
      const left = x(s.distance) > wide / 2;
      add(svg, "text", { x: x(s.distance) + (left ? -5 : 5), y: box.bottom - 6, "text-anchor": left ? "end" : "start", "font-size": 11.5,
        "font-weight": 700, fill: INK, stroke: "#fff", "stroke-width": 3, "paint-order": "stroke" }, s.id);
    }
    const dot = add(svg, "circle", { cx: x(s.distance), cy: y(s.lowest), r: shown ? 5 : mine.length > 60 ? 1.6 : 3.2, fill: shown ? "#ffd24d" : "#3d3127", stroke: "#3d3127", cursor: "pointer" });
    dot.addEventListener("click", () => choose(i));
  }
  byId("long-caption").textContent = `Lowest ground at ${mine.length} sections of ${stream}` + (events.length ? " and the water at each event" : "") + ", straight between sections.";
}

// ------------------------------------------------------------------------------------------------
// Tables

function sectionRow(section, name) {
  const at = section.events[state.event];
  if (name === "section_id") return section.id;
  if (name === "stream") return section.stream;
  if (name === "stream_distance") return section.distance;
  if (name === "status") return at ? at.status : section.status;
  if (name === "findings") return section.findings;
  return answer(section, state.event, name);
}

function makeTable(kind, columns, rowsNow, about) {
  const table = byId(`${kind}-table`);
  if (!table) return () => {};
  const text = byId(`${kind}-text`), select = byId(`${kind}-status`), count = byId(`${kind}-count`);
  const sort = { by: -1, down: false };
  const head = add(add(table, "thead"), "tr"), body = add(table, "tbody");
  const heads = columns.map((column, i) => {
    const th = add(head, "th", { scope: "col", class: column.decimals === null ? null : "number" });
    const button = add(th, "button", { type: "button" }, column.title);
    button.addEventListener("click", () => {
      if (sort.by === i) sort.down = !sort.down;
      else Object.assign(sort, { by: i, down: false });
      paint();
    });
    return th;
  });
  const judged = columns.findIndex((c) => c.name === about.filter);
  function paint() {
    const all = rowsNow();
    const kinds = [...new Set(all.map((r) => String(r.cells[judged] ?? "")))].filter(Boolean);
    if (about.filter === "status") kinds.sort((a, b) => STATUSES.indexOf(a) - STATUSES.indexOf(b));
    const before = select.value;
    select.replaceChildren();
    add(select, "option", { value: "" }, "all");
    for (const one of kinds) add(select, "option", { value: one }, one);
    select.value = kinds.includes(before) ? before : "";
    const wanted = text.value.trim().toLowerCase();
    const rows = all.filter((r) => (!wanted || r.cells.some((c, i) => columns[i].decimals === null && String(c ?? "").toLowerCase().includes(wanted)))
      && (!select.value || r.cells[judged] === select.value));
    if (sort.by >= 0) {
      const words = new Intl.Collator("en", { numeric: true });
      rows.sort((a, b) => {
        const [p, q] = [a.cells[sort.by], b.cells[sort.by]];
        // what has no number comes last, whichever way
        if (p === null || p === undefined) return q === null || q === undefined ? 0 : 1;
        if (q === null || q === undefined) return -1;
        const way = typeof p === "number" ? p - q : words.compare(p, q);
        return sort.down ? -way : way;
      });
    }
    heads.forEach((th, i) => {
      if (i === sort.by) th.setAttribute("aria-sort", sort.down ? "descending" : "ascending");
      else th.removeAttribute("aria-sort");
    });
    body.replaceChildren();
    for (const row of rows) {
      const tr = add(body, "tr", { [`data-${about.word}`]: row.id });
      row.cells.forEach((value, i) => {
        const { name, decimals } = columns[i];
        if (name === about.key) {
          const th = add(tr, "th", { scope: "row" });
          if (row.open) add(th, "button", { type: "button" }, value).addEventListener("click", row.open);
          else th.textContent = value;
        } else if (name === "status") {
          const td = add(tr, "td");
          if (value) mark(td, value);
        } else if (decimals === null) add(tr, "td", {}, value || DASH);
        else add(tr, "td", { class: "number" }, number(value, decimals));
      });
    }
    const at = events.length ? ` at ${events[state.event].name}` : "";
    count.textContent = `${rows.length} of ${all.length} ${about.words}${at}`;
    about.after();
  }
  text.addEventListener("input", paint);
  select.addEventListener("change", paint);
  return paint;
}

function markRow() {
  for (const tr of document.querySelectorAll("#sections-table tbody tr")) {
    tr.classList.toggle("chosen", numberOf.get(tr.dataset.section) === state.shown);
  }
}

const paintSections = makeTable("sections", data.tables.sections, () => sections.map((section, i) => ({
  id: section.id,
  cells: data.tables.sections.map((c) => sectionRow(section, c.name)),
  open: () => { choose(i); toPanel(); },
})), { filter: "status", key: "section_id", word: "section", words: "sections", after: markRow });

const paintCrossings = makeTable("crossings", data.tables.crossings, () => data.crossings
  .filter((c) => c.rows[state.event]).map((c) => ({ id: c.id, cells: c.rows[state.event], open: () => toCrossing(c.id) })),
  { filter: "verdict", key: "crossing_id", word: "crossing", words: "crossings", after: () => {} });

// ------------------------------------------------------------------------------------------------
// What is shown

function show(i) {
  if (i === state.shown) return;
  state.shown = i;
  const select = byId("long-stream"), stream = sections[i].stream;
  if (select && [...select.options].some((o) => o.value === stream)) select.value = stream;
  paintMap();
  paintPanel();
  drawLong();
  markRow();
}

function choose(i) {
  state.chosen = i;
  show(i);
}

function toPanel() {
  const panel = byId("panel");
  panel.focus({ preventScroll: true });
  panel.scrollIntoView({ block: "start" });
}

function paintAll() {
  paintMap();
  paintPanel();
  drawLong();
  paintSections();
  paintCrossings();
}

function buildEvents() {
  const holder = byId("events");
  if (!events.length) return;
  holder.hidden = false;
  const choices = holder.querySelector(".choices");
  events.forEach((event, i) => {
    const label = add(choices, "label");
    const input = add(label, "input", { type: "radio", name: "event", value: event.name });
    input.checked = i === state.event;
    input.addEventListener("change", () => { state.event = i; paintAll(); });
    add(label, "span", { class: "swatch", style: `background:${event.tone}` });
    label.append(event.name);
  });
}

document.addEventListener("click", (event) => {
  const link = event.target.closest("a[data-section]");
  if (!link || !numberOf.has(link.dataset.section)) return;
  event.preventDefault();
  choose(numberOf.get(link.dataset.section));
  toPanel();
});

// a page on paper shows everything
const closed = [];
window.addEventListener("beforeprint", () => {
  for (const details of document.querySelectorAll("details:not([open])")) {
    closed.push(details);
    details.open = true;
  }
});
window.addEventListener("afterprint", () => {
  for (const details of closed.splice(0)) details.open = false;
});
// a link to a finding opens it
window.addEventListener("hashchange", () => {
  const target = document.getElementById(decodeURIComponent(location.hash.slice(1)));
  const details = target && target.closest("details");
  if (details) details.open = true;
});

buildEvents();
buildMap();
buildLong();
paintAll();
let wide = window.innerWidth;
window.addEventListener("resize", () => {
  if (window.innerWidth === wide) return;
  wide = window.innerWidth;
  setTimeout(() => { if (data.map.width) setView(); paintPanel(); drawLong(); }, 60);
});
})();
