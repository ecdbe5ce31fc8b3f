/* The panel of a picked site: frequency curve with limits, peaks and thresholds, floods by route, screening, pool. */
"use strict";

const sitePanel = (() => {
  const sites = study.sites;
  const LOOKS = {
    station: ["soft", [2, 3]], weighted_skew: ["water", [7, 3]], regression: ["wrack", [7, 3]], record_and_regression: ["moss", []],
    growth_curve: ["water", [7, 3]], quantile_regression: ["wrack", [2, 3]], routes_combined: ["plum", [9, 3, 2, 3]], stream_transfer: ["moss", []],
  };
  const WORDS = {
    station: "record, station skew", weighted_skew: "record, weighted skew", regression: "regression, without the gauge",
    record_and_regression: "record and regression", growth_curve: "growth curve", quantile_regression: "quantile regression",
    routes_combined: "routes combined", stream_transfer: "transfer along the stream",
  };
  const zOf = new Map(study.aeps.map(({ p, z }) => [p, z]));
  const textOf = new Map(study.aeps.map(({ p, text }) => [p, text]));
  let current = null;

  const key = (i) => (sites.kind[i] === "t" ? "t:" : "") + sites.id[i];
  const word = (route) => WORDS[route] ?? plain(route);
  const title = (i) => (sites.name[i] ? `${sites.id[i]} ${sites.name[i]}` : sites.id[i]);

  function drawCurve(floods, peaks) {
    const routes = Object.entries(floods);
    const lines = { xs: [], ys: [], colour: [], width: [], dash: [] };
    let band = { x: [], lower: [], upper: [] };
    const legend = [];
    for (const [route, one] of routes) {
      const [name, dash] = LOOKS[route] ?? ["soft", []];
      const known = one.p.map((_, i) => i).filter((i) => one.flow[i] !== null && one.flow[i] > 0 && zOf.has(one.p[i]));
      const width = one.adopted ? 3 : 1.5, shownDash = one.adopted ? [] : dash;
      lines.xs.push(known.map((i) => zOf.get(one.p[i])));
      lines.ys.push(known.map((i) => one.flow[i]));
      lines.colour.push(colour(name));
      lines.width.push(width);
      lines.dash.push(shownDash);
      legend.push([drawLine(colour(name), width, shownDash), word(route) + (one.adopted ? " (adopted)" : "")]);
      if (one.adopted) {
        const ends = known.filter((i) => one.lower[i] > 0 && one.upper[i] !== null);
        band = { x: ends.map((i) => zOf.get(one.p[i])), lower: ends.map((i) => one.lower[i]), upper: ends.map((i) => one.upper[i]) };
      }
    }
    if (band.x.length) legend.push([drawSymbol("square", colour("water") + "40"), `${Math.round(100 * study.confidence)}\u202f% interval of the adopted floods`]);
    fill("curve", "lines", lines);
    fill("curve", "band", band);
    legend.push(...drawPeaks(peaks));
    const flows = [...lines.ys.flat(), ...band.lower, ...band.upper, ...(peaks?.high ?? []), ...(peaks?.low ?? [])].filter((flow) => flow > 0);
    const range = frames.curve.figure.y_range;
    if (flows.length) range.setv({ start: Math.min(...flows) * 0.8, end: Math.max(...flows) * 1.25 });
    for (const axis of [...frames.curve.figure.left, ...frames.years.figure.left]) axis.axis_label = `flow, ${study.units.flow}`;
    document.getElementById("curve-legend").replaceChildren(...legend.map(([symbol, text]) => make("li", {}, symbol, " ", text)));
  }

  function drawPeaks(peaks) {
    const columns = { z: [], flow: [], marker: [], fill: [], label: [] }, spans = { z: [], low: [], high: [] };
    const kinds = [["circle", colour("paper"), "annual peak"], ["diamond", colour("wrack"), "historic peak"], ["x", colour("soft"), "low flood, fitted as below its threshold"]];
    const present = new Set();
    peaks?.z.forEach((z, i) => {
      const [low, high] = [peaks.low[i], peaks.high[i]];
      if (z === null || z === undefined || !((high ?? low) > 0)) return;
      const [marker, fillColour] = kinds[peaks.kind[i]];
      present.add(peaks.kind[i]);
      if (low !== high && high !== null && low > 0) { spans.z.push(z); spans.low.push(low); spans.high.push(high); }
      columns.z.push(z);
      columns.flow.push(low > 0 && high !== null ? Math.sqrt(low * high) : (high ?? low));
      columns.marker.push(marker);
      columns.fill.push(fillColour);
      columns.label.push(`${peaks.year[i]}: ${peakText(peaks, i)}`);
    });
    fill("curve", "peaks", columns);
    fill("curve", "spans", spans);
    return kinds.filter((_, kind) => present.has(kind)).map(([marker, fillColour, text]) => [drawSymbol(marker, fillColour, colour("ink")), text]);
  }

  function peakText(peaks, i) {
    const [low, high] = [peaks.low[i], peaks.high[i]];
    const flow = low === high ? wordNumber(low) : high === null ? `${wordNumber(low)} or more` : `${wordNumber(low)} to ${wordNumber(high)}`;
    return `${flow} ${study.units.flow}`;
  }

  function drawYears(peaks) {
    const frame = document.getElementById("years-part");
    frame.hidden = !peaks?.year.length;
    if (frame.hidden) return;
    const tops = peaks.high.map((high, i) => high ?? peaks.low[i]);
    const top = Math.max(...tops, 1e-9) * 1.1;
    const years = [...peaks.year, ...peaks.thresholds.flatMap(([first, last]) => [first, last])];
    fill("years", "stems", { year: peaks.year, low: peaks.year.map(() => 0), high: tops });
    fill("years", "dots", {
      year: peaks.year, flow: tops, marker: peaks.kind.map((kind) => ["circle", "diamond", "x"][kind]),
      fill: peaks.kind.map((kind) => colour(["paper", "wrack", "soft"][kind])),
      label: peaks.year.map((year, i) => `${year}: ${peakText(peaks, i)}`),
    });
    const unseen = { left: [], right: [], bottom: [], top: [] };
    for (const [first, last, low, high] of peaks.thresholds) {
      const bands = [[0, low ?? top]];
      if (high !== null && low !== null) bands.push([high, top]);
      for (const [bottom, upper] of bands) {
        if (!(upper > bottom)) continue;
        unseen.left.push(first - 0.5);
        unseen.right.push(last + 0.5);
        unseen.bottom.push(bottom);
        unseen.top.push(Math.min(upper, top));
      }
    }
    fill("years", "unseen", unseen);
    frames.years.figure.x_range.setv({ start: Math.min(...years) - 1.5, end: Math.max(...years) + 1.5 });
    frames.years.figure.y_range.setv({ start: 0, end: top });
    const caption = document.getElementById("years-caption");
    caption.textContent = peaks.thresholds.length
      ? "Peaks by water year. Shaded: floods of such a size would have left no record in those years."
      : "Peaks by water year. Every flood of these years would be on record.";
  }

  /** Floods by route: a row per probability, a column per route, the adopted one first. */
  function floodTable(floods) {
    const routes = Object.keys(floods).sort((a, b) => Number(!!floods[b].adopted) - Number(!!floods[a].adopted));
    if (!routes.length) return null;
    const aeps = study.aeps.map(({ p }) => p).filter((p) => routes.some((route) => floods[route].p.includes(p)));
    const head = make("tr", {}, make("th", { scope: "col", class: "n" }, "AEP"));
    for (const route of routes) head.append(make("th", { scope: "col", class: "n" }, `${word(route)}${floods[route].adopted ? ", adopted" : ""}`));
    const body = aeps.map((p) => {
      const row = make("tr", {}, make("th", { scope: "row", class: "n" }, textOf.get(p)));
      for (const route of routes) {
        const one = floods[route], i = one.p.indexOf(p);
        const range = i >= 0 && one.lower[i] !== null && one.upper[i] !== null ? ` (${wordNumber(one.lower[i])} – ${wordNumber(one.upper[i])})` : "";
        row.append(make("td", { class: one.adopted ? "n adopted" : "n" }, i < 0 ? "" : wordNumber(one.flow[i]) + range));
      }
      return row;
    });
    const caption = make("caption", {}, `Floods in ${study.units.flow}, with their ${Math.round(100 * study.confidence)}\u202f% intervals`);
    return make("div", { class: "table", role: "region", "aria-label": "Floods of the picked site", tabindex: "0" },
      make("table", { "data-title": `Floods of ${title(current)}` }, caption, make("thead", {}, head), make("tbody", {}, ...body)));
  }

  function factList(i) {
    const facts = [["area", `${wordNumber(sites.area[i], 4)} ${study.units.area}`], ["region", sites.region[i]]];
    for (const pool of sites.pool[i].split(" ").filter(Boolean)) {
      const about = study.pools[sites.pool[i]] ?? study.pools[pool];
      if (about) { facts.push(["pool", `${study.pools[sites.pool[i]] ? sites.pool[i] : pool}: ${about}`]); break; }
    }
    if (sites.kind[i] === "g") {
      facts.push(["used", sites.used[i] ? "yes" : "no"]);
      (study.facts[sites.id[i]] ?? []).forEach((value, n) => facts.push([study.fact_labels[n], value]));
    }
    return make("dl", { class: "site-facts" }, ...facts.filter(([, value]) => value !== "" && value !== undefined).map(([name, value]) => make("div", {}, make("dt", {}, name), make("dd", {}, value))));
  }

  function noteList(i, floods) {
    const notes = sites.kind[i] === "t" ? Object.values(floods).map((one) => one.note).filter(Boolean).flatMap((note) => note.split("; ")) : (study.notes[sites.id[i]] ?? []);
    const unique = [...new Set(notes)];
    return unique.length ? make("div", { class: "site-notes" }, make("h4", {}, "What to know before use"), make("ul", {}, ...unique.map((note) => make("li", {}, note)))) : null;
  }

  function shareButton(i) {
    const button = make("button", { type: "button", class: "quiet" }, "Copy link to this site");
    button.addEventListener("click", async () => {
      const done = await copyText(location.href.split("#")[0] + "#site=" + encodeURIComponent(sites.id[i]));
      announce(done ? "Link copied." : "The link could not be copied; it stands in the address line.");
      button.textContent = done ? "Link copied" : "Copy the address line";
      setTimeout(() => { button.textContent = "Copy link to this site"; }, 2500);
    });
    return button;
  }

  /** Show a site, by its number in the list of sites. */
  function show(i) {
    current = i;
    const floods = study.floods[key(i)] ?? {}, peaks = sites.kind[i] === "g" ? study.peaks[sites.id[i]] : undefined;
    const kind = sites.kind[i] === "t" ? "Ungauged site" : sites.used[i] ? "Gauge" : "Gauge, not used";
    document.getElementById("site-title").replaceChildren(make("small", {}, kind), make("span", {}, title(i)));
    document.getElementById("site-panel").classList.add("picked");
    drawCurve(floods, peaks);
    drawYears(peaks);
    document.getElementById("curve-caption").textContent = peaks
      ? "Peaks stand at their plotting positions, to which no curve is fitted. Where the routes part, the choice of route matters as much as the interval."
      : "No peaks were observed here. Where the routes part, the choice of route matters as much as the interval.";
    const empty = !Object.keys(floods).length && !peaks?.z.some((z) => z !== null);
    document.getElementById("curve-part").hidden = empty;
    document.getElementById("curve-none").hidden = !empty;
    const rare = Object.values(floods).find((one) => one.adopted);
    document.getElementById("curve-frame").setAttribute("aria-label", `Frequency curve of ${title(i)}. The same numbers stand in the table of floods below.`);
    document.getElementById("site-details").replaceChildren(...[noteList(i, floods), floodTable(floods), factList(i), make("p", { class: "tools" }, shareButton(i))].filter(Boolean));
    for (const table of document.querySelectorAll("#site-details table")) window.equipTable(table);
    announce(`${kind} ${title(i)} shown${rare ? "" : "; no adopted floods"}.`);
  }

  function repaint() {
    if (current !== null) show(current);
  }

  return { show, repaint, title };
})();
