/* The Bokeh frames: embedding them, filling their sources, and keeping their colours with the page's. */
"use strict";

const frames = {};

/** Embed all frames; afterwards `frames.map` and so on are Bokeh's figures. */
async function embedFrames() {
  Bokeh.set_log_level("warn");
  for (const item of JSON.parse(document.getElementById("frame-items").textContent)) {
    const name = item.target_id.replace("-frame", "");
    const views = await Bokeh.embed.embed_item(item);
    const view = views.roots ? views.roots[0] : [...views][0];
    frames[name] = { figure: view.model, view };
  }
}

/** A renderer or source of a frame, by the name it was given. */
function part(frame, name) {
  return frames[frame].figure.renderers.find((renderer) => renderer.name === name);
}

/** Replace what a renderer shows. */
function fill(frame, name, columns) {
  part(frame, name).data_source.data = columns;
}

/** Turn every frame to the page's colours. */
function paintFrames() {
  const [ink, soft, line, water, panel] = ["ink", "soft", "line", "water", "panel"].map(colour);
  for (const { figure } of Object.values(frames)) {
    for (const axis of [...figure.left, ...figure.below].filter((one) => "axis_label" in one)) {
      axis.setv({ axis_line_color: line, major_tick_line_color: line, major_label_text_color: soft, axis_label_text_color: soft });
    }
    for (const grid of figure.center.filter((one) => "grid_line_color" in one)) grid.grid_line_color = line;
  }
  part("map", "basins").glyph.setv({ line_color: soft, fill_color: water });
  part("map", "regions").glyph.line_color = ink;
  part("map", "ring").glyph.line_color = ink;
  frames.map.figure.background_fill_color = panel;
  part("curve", "band").glyph.fill_color = water;
  part("curve", "spans").glyph.line_color = ink;
  part("curve", "peaks").glyph.line_color = ink;
  part("years", "stems").glyph.line_color = water;
  part("years", "dots").glyph.line_color = ink;
  part("years", "unseen").glyph.fill_color = soft;
}

/** A symbol as the map draws it, for legends: a small drawing with the same shape and colour. */
function drawSymbol(marker, fillColour, lineColour = "none") {
  const shapes = {
    circle: "M7 1.5a5.5 5.5 0 1 1 0 11a5.5 5.5 0 1 1 0-11z",
    square: "M2.2 2.2h9.6v9.6h-9.6z",
    triangle: "M7 1.6L13 12H1z",
    diamond: "M7 0.8L12.6 7L7 13.2L1.4 7z",
    inverted_triangle: "M7 12.4L1 2h12z",
    plus: "M5 1.5h4v3.5h3.5v4h-3.5v3.5h-4v-3.5h-3.5v-4h3.5z",
    star: "M7 0.8l1.7 4.2 4.5.3-3.4 2.9 1.1 4.4L7 10.2 3.100 12.600l1.100-4.400L0.800 5.300l4.500-.3z",
    hex: "M3.800 1.500h6.400L13.400 7l-3.200 5.500H3.800L.6 7z",
    x: "M2.500 2.500l9 9M11.500 2.500l-9 9",
  };
  const space = "http://www.w3.org/2000/svg";
  const svg = document.createElementNS(space, "svg"), path = document.createElementNS(space, "path");
  for (const [name, value] of Object.entries({ viewBox: "0 0 14 14", width: 14, height: 14, "aria-hidden": "true" })) svg.setAttribute(name, value);
  const stroke = marker === "x" ? fillColour : lineColour;
  for (const [name, value] of Object.entries({ d: shapes[marker] ?? shapes.circle, fill: marker === "x" ? "none" : fillColour, stroke, "stroke-width": marker === "x" ? 2 : 1 })) path.setAttribute(name, value);
  svg.append(path);
  return svg;
}

/** A line as a plot draws it, for legends. */
function drawLine(lineColour, width, dash) {
  const space = "http://www.w3.org/2000/svg";
  const svg = document.createElementNS(space, "svg"), line = document.createElementNS(space, "line");
  for (const [name, value] of Object.entries({ viewBox: "0 0 26 14", width: 26, height: 14, "aria-hidden": "true" })) svg.setAttribute(name, value);
  for (const [name, value] of Object.entries({ x1: 1, x2: 25, y1: 7, y2: 7, stroke: lineColour, "stroke-width": width, "stroke-dasharray": dash.join(" ") })) line.setAttribute(name, value);
  svg.append(line);
  return svg;
}
