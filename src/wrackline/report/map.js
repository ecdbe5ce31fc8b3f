/* The map: its sites coloured by the chosen view, its layers, its legend, and moving about by mouse, touch and keys. */
"use strict";

const studyMap = (() => {
  const BLANK = "#9aa4ab";
  const MARKERS = { o: "circle", s: "square", "^": "triangle", D: "diamond", v: "inverted_triangle", P: "plus", X: "star", h: "hex" };
  const sites = study.sites, count = sites.id.length;
  const bounds = { x: extent(sites.lon), y: extent(sites.lat) };
  let view = study.views[0];

  function extent(values) {
    const known = values.filter(Number.isFinite);
    return known.length ? [known.reduce((a, b) => Math.min(a, b)), known.reduce((a, b) => Math.max(a, b))] : [0, 1];
  }

  /** Round limits for seven classes, about zero for a two-sided view. */
  function classLimits(values, kind) {
    const known = values.filter((value) => value !== null).sort((a, b) => a - b);
    const at = (share) => known[Math.min(known.length - 1, Math.floor(share * known.length))];
    const nice = (value) => Number(value.toPrecision(2));
    if (kind === "two_sided") {
      const sizes = known.map(Math.abs).sort((a, b) => a - b);
      const far = sizes[Math.floor(0.95 * (sizes.length - 1))] || 1;
      return [-5, -3, -1, 1, 3, 5].map((step) => nice((step * far) / 6));
    }
    const limits = [1, 2, 3, 4, 5, 6].map((step) => nice(at(step / 7)));
    return [...new Set(limits)];
  }

  function classOf(value, limits) {
    const above = limits.findIndex((limit) => value < limit);
    return above < 0 ? limits.length : above;
  }

  function paletteFor(limits, kind) {
    const colours = study.palettes[kind];
    const step = limits.length ? (colours.length - 1) / limits.length : 0;
    return Array.from({ length: limits.length + 1 }, (_, i) => colours[Math.round(i * step)]);
  }

  function groupsOf(current) {
    const members = new Set(current.values.filter((_, i) => sites.kind[i] === "g" && sites.used[i]));
    return [...members].sort();
  }

  function look(group, groups) {
    const [fillColour, marker] = study.looks[Math.max(0, groups.indexOf(group)) % study.looks.length];
    return { fillColour, marker: MARKERS[marker] };
  }

  /** Fill and marker of every site under the current view. */
  function paintSites() {
    const columns = { x: sites.lon, y: sites.lat, fill: [], line: [], marker: [], size: [], label: [] };
    const byGroup = view.kind === "groups", groups = byGroup ? groupsOf(view) : [];
    const limits = byGroup ? [] : classLimits(view.values, view.kind), palette = byGroup ? [] : paletteFor(limits, view.kind);
    const size = Math.max(6, Math.min(12, 190 / Math.sqrt(count + 100)));
    const paper = colour("paper"), ink = colour("ink");
    for (let i = 0; i < count; i++) {
      const target = sites.kind[i] === "t", value = view.values[i];
      let fillColour, marker = target ? "plus" : "circle";
      if (byGroup) {
        const own = look(value, groups);
        fillColour = target ? paper : own.fillColour;
        if (!target) marker = own.marker;
      } else fillColour = value === null ? "rgba(0,0,0,0)" : palette[classOf(value, limits)];
      if (!sites.used[i]) { fillColour = "rgba(0,0,0,0)"; marker = "circle"; }
      columns.fill.push(fillColour);
      columns.line.push(sites.used[i] ? (target ? ink : value === null ? BLANK : ink) : BLANK);
      columns.marker.push(marker);
      columns.size.push(target ? size + 4 : size);
      const shown = byGroup ? value : value === null ? "no value" : String(value).replace("-", "\u2212");
      columns.label.push([sites.id[i], sites.name[i], sites.used[i] ? shown : "not used"].filter(Boolean).join("\n"));
    }
    fill("map", "sites", columns);
    drawLegend(byGroup, groups, limits, palette);
    document.getElementById("map-note").textContent = view.note;
  }

  function drawLegend(byGroup, groups, limits, palette) {
    const entries = [];
    const ink = colour("ink");
    if (byGroup) for (const group of groups.slice(0, 24)) {
      const own = look(group, groups);
      entries.push([drawSymbol(own.marker, own.fillColour, ink), group || "gauge used"]);
    } else palette.forEach((fillColour, i) => entries.push([drawSymbol("square", fillColour, ink), rangeText(limits, i)]));
    if (byGroup && groups.length > 24) entries.push(["", `and ${groups.length - 24} more`]);
    if (sites.kind.includes("t")) entries.push([drawSymbol("plus", byGroup ? colour("paper") : "none", ink), "ungauged site"]);
    if (sites.used.includes(false)) entries.push([drawSymbol("circle", "none", BLANK), "gauge not used"]);
    if (!byGroup && view.values.some((value, i) => value === null && sites.used[i])) entries.push([drawSymbol("circle", "none", BLANK), "no value"]);
    const list = (rows) => make("ul", { class: "legend" }, ...rows.map(([symbol, text]) => make("li", {}, symbol, " ", text)));
    const surfaces = ["skew", "mse"].map((band) => [band, study.skew && part("map", `${band} surface`)]).filter(([, surface]) => surface?.visible);
    document.getElementById("map-legend").replaceChildren(
      list(entries),
      ...surfaces.flatMap(([band, surface]) => [make("p", {}, band === "skew" ? "Surface: generalized skew" : "Surface: mean square error of the skew"), list(surfaceLegend(surface))]),
    );
  }

  function surfaceLegend(surface) {
    const { palette, low, high } = surface.glyph.color_mapper;
    const step = (high - low) / palette.length, word = (value) => wordNumber(value, 2);
    const colours = [...palette].map((value) => (typeof value === "string" ? value : "#" + (value >>> 8).toString(16).padStart(6, "0")));
    return colours.map((fillColour, i) => [drawSymbol("square", fillColour), `${word(low + i * step)} to ${word(low + (i + 1) * step)}`]);
  }

  function rangeText(limits, i) {
    const word = (value) => String(value).replace("-", "\u2212");
    if (!limits.length) return "all";
    if (i === 0) return `below ${word(limits[0])}`;
    return i === limits.length ? `${word(limits.at(-1))} and more` : `${word(limits[i - 1])} to ${word(limits[i])}`;
  }

  function drawOutlines() {
    const step = 1e-4;
    for (const name of ["basins", "regions"]) {
      const xs = [], ys = [];
      for (const [, steps] of study.outlines[name]) {
        const x = [], y = [];
        let east = 0, north = 0;
        for (let i = 0; i < steps.length; i += 2) {
          x.push((east += steps[i]) * step);
          y.push((north += steps[i + 1]) * step);
        }
        xs.push(x);
        ys.push(y);
        for (const [axis, values] of [["x", x], ["y", y]]) {
          const [low, high] = extent(values);
          bounds[axis] = [Math.min(bounds[axis][0], low), Math.max(bounds[axis][1], high)];
        }
      }
      fill("map", name, { xs, ys });
    }
  }

  /** Degrees of longitude that are as long as one of latitude, at the middle of the map. */
  function stretch() {
    const middle = (bounds.y[0] + bounds.y[1]) / 2;
    return 1 / Math.max(0.05, Math.cos((middle * Math.PI) / 180));
  }

  /** Show a place: its middle and the height in degrees; the width follows from the frame's shape. */
  function lookAt(x, y, height) {
    const { figure, view: own } = frames.map;
    const width = (own.frame?.bbox.width || figure.inner_width || 500) / (own.frame?.bbox.height || figure.inner_height || 500);
    const wide = height * width * stretch();
    figure.x_range.setv({ start: x - wide / 2, end: x + wide / 2 });
    figure.y_range.setv({ start: y - height / 2, end: y + height / 2 });
  }

  function whole() {
    const { figure, view: own } = frames.map;
    const shape = (own.frame?.bbox.width || figure.inner_width || 500) / (own.frame?.bbox.height || figure.inner_height || 500);
    const [x, y] = [bounds.x, bounds.y];
    const height = Math.max(y[1] - y[0], (x[1] - x[0]) / stretch() / shape, 0.02) * 1.1;
    lookAt((x[0] + x[1]) / 2, (y[0] + y[1]) / 2, height);
  }

  function centre() {
    const { x_range, y_range } = frames.map.figure;
    return [(x_range.start + x_range.end) / 2, (y_range.start + y_range.end) / 2, y_range.end - y_range.start];
  }

  function zoom(factor) {
    const [x, y, height] = centre();
    lookAt(x, y, height * factor);
  }

  function move(east, north) {
    const [x, y, height] = centre();
    lookAt(x + east * height * stretch() * 0.15, y + north * height * 0.15, height);
  }

  function onKey(event) {
    const moves = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] };
    if (event.ctrlKey || event.altKey || event.metaKey) return;
    if (moves[event.key]) move(...moves[event.key]);
    else if (event.key === "+" || event.key === "=") zoom(0.7);
    else if (event.key === "-") zoom(1 / 0.7);
    else if (event.key === "0" || event.key === "Home") whole();
    else return;
    event.preventDefault();
  }

  /** Ring a site, and bring it into view if it is not. */
  function mark(i) {
    fill("map", "ring", { x: [sites.lon[i]], y: [sites.lat[i]] });
    const { x_range, y_range } = frames.map.figure;
    const inside = sites.lon[i] > x_range.start && sites.lon[i] < x_range.end && sites.lat[i] > y_range.start && sites.lat[i] < y_range.end;
    if (!inside) lookAt(sites.lon[i], sites.lat[i], centre()[2]);
  }

  function layerSwitch(label, name, visible) {
    const renderer = part("map", name);
    renderer.visible = visible;
    const box = make("input", { type: "checkbox", ...(visible ? { checked: true } : {}) });
    box.addEventListener("change", () => {
      renderer.visible = box.checked;
      paintSites();
    });
    return make("label", {}, box, " ", label);
  }

  /** Build the controls and the first view; `onPick` gets the number of a picked site. */
  function start(onPick) {
    drawOutlines();
    const select = document.getElementById("map-view");
    study.views.forEach((one, i) => select.append(make("option", { value: i }, one.label)));
    select.addEventListener("change", () => {
      view = study.views[Number(select.value)];
      paintSites();
    });
    const layers = document.getElementById("map-layers");
    if (study.outlines.basins.length) layers.append(layerSwitch("basins", "basins", study.outlines.basins.length <= 400));
    if (study.outlines.regions.length) layers.append(layerSwitch("regions", "regions", true));
    if (study.skew) layers.append(layerSwitch("generalized skew", "skew surface", false), layerSwitch("error of the skew", "mse surface", false));
    document.getElementById("map-frame").addEventListener("keydown", onKey);
    const act = { nearer: () => zoom(0.7), farther: () => zoom(1 / 0.7), whole };
    for (const [name, action] of Object.entries(act)) document.getElementById(`map-${name}`).addEventListener("click", action);
    const source = part("map", "sites").data_source;
    source.selected.properties.indices.change.connect(() => {
      if (source.selected.indices.length) onPick(source.selected.indices[0]);
    });
    paintSites();
    const tall = ((bounds.y[1] - bounds.y[0]) * stretch()) / Math.max(bounds.x[1] - bounds.x[0], 1e-6);
    frames.map.figure.height = Math.round(Math.max(380, Math.min(620, tall * (frames.map.figure.inner_width || 450) * 1.05 + 40)));
    whole();
    let width = frames.map.figure.inner_width;
    frames.map.figure.properties.inner_width.change.connect(() => {
      const now = frames.map.figure.inner_width;
      if (Math.abs(now - width) > 1) { width = now; whole(); }
    });
  }

  return { start, mark, repaint: paintSites };
})();
