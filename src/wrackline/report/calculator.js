/* The calculator: one site from the form or many from a CSV, checked, estimated, shown, copied and downloaded. */
"use strict";

const calculator = (() => {
  const models = study.calculator, settings = models.settings;
  const unit = study.units, percent = `${Math.round(100 * settings.confidence)}\u202f%`;
  const NUMBER = /^[-+]?(\d+\.?\d*|\.\d+)(e[-+]?\d+)?$/i;
  const equations = [models.index_flood, models.quantiles].filter(Boolean);
  const pooled = models.pooling_method === "regions" ? Object.keys(models.growth) : [...equations.flatMap((one) => one.regions), ...(models.skew_model?.regions ?? [])];
  const regions = settings.pooling.regions === "one" ? [] : [...new Set(pooled)].sort();
  const byRegion = regions.length > 0;
  const gauges = Object.keys(models.gauges);
  const needsPlace = models.skew_model?.kind === "surface";
  const skewAttributes = (models.skew_model?.attributes ?? []).filter((name) => name !== "area");
  const needed = [...new Set(equations.flatMap((one) => one.attributes))].filter((name) => name !== "area");
  const optional = skewAttributes.filter((name) => !needed.includes(name));
  const HEAD = ["target_id", "name", "aep", "route", "flow", "lower", "upper", "se_log10", "adopted", "warnings", "generalized_skew", "generalized_skew_mse"];
  let results = [];

  const limits = (name) => {
    const declared = settings.attributes[name] ?? {};
    return name === "area" ? [0, null, true] : [declared.lower ?? null, declared.upper ?? null, false];
  };
  const unitOf = (name) => (name === "area" ? unit.area : (settings.attributes[name]?.unit ?? "").replace(/^1$/, ""));

  /** Range of an attribute among the gauges, in the units of the form; null where no equation has it. */
  function rangeOf(name) {
    const back = { none: (v) => v, log10: (v) => 10 ** v, sqrt: (v) => v * v, log10_plus_1: (v) => 10 ** v - 1 };
    const spans = equations.filter((one) => one.attributes.includes(name)).map((one) => {
      const at = one.space.names.indexOf(name), transform = back[one.transforms[one.attributes.indexOf(name)]];
      return [transform(one.space.lower[at]), transform(one.space.upper[at])];
    });
    if (!spans.length) return null;
    const scale = name === "area" ? unit.area_in_km2 : 1;
    return [Math.max(...spans.map(([low]) => low)) / scale, Math.min(...spans.map(([, high]) => high)) / scale];
  }

  /** Read a number as people write them; the second value says what is wrong. */
  function readNumber(text, name, required) {
    const bare = text.replace(/[\s\u00a0\u202f]/g, "").replace("\u2212", "-");
    if (bare === "") return [NaN, required ? `${name} is missing.` : ""];
    if (/^[-+]?\d+,\d+$/.test(bare)) return [NaN, `${name} is “${text}”: write the decimals after a point, and no mark between thousands.`];
    if (!NUMBER.test(bare)) return [NaN, `${name} is “${text}”, which is not a number.`];
    const value = Number(bare), [low, high, open] = limits(name);
    const about = [low, high].every((end) => end !== null) ? `between ${low} and ${high}` : low !== null ? (open ? `above ${low}` : `${low} or more`) : `${high} or less`;
    if (!Number.isFinite(value) || (low !== null && (value < low || (open && value <= low))) || (high !== null && value > high)) {
      return [NaN, `${name} is ${text}; it must be ${about}${unitOf(name) ? " " + unitOf(name) : ""}.`];
    }
    return [value, ""];
  }

  /** Turn texts by column into a site; `problems` lists what stands in the way. */
  function readSite(texts, fallbackId) {
    const problems = [], attributes = {};
    const number = (name, required) => {
      const [value, problem] = readNumber(texts[name] ?? "", name, required);
      if (problem) problems.push({ name, problem });
      return value;
    };
    const area = number("area", true) * unit.area_in_km2;
    for (const name of needed) attributes[name] = number(name, true);
    for (const name of optional) attributes[name] = number(name, false);
    const region = (texts.region ?? "").trim();
    if (byRegion && !region) problems.push({ name: "region", problem: "region is missing." });
    else if (byRegion && !regions.includes(region)) problems.push({ name: "region", problem: `region is “${region}”; the study's regions are ${regions.join(", ")}.` });
    for (const name of ["upstream_gauge", "downstream_gauge"]) {
      const gauge = (texts[name] ?? "").trim();
      if (gauge && !gauges.includes(gauge)) problems.push({ name, problem: `${name} is “${gauge}”, which is not a gauge with estimates in this study; leave it blank or mend it.` });
    }
    const degrees = (name) => ((texts[name] ?? "").trim() === "" ? NaN : number(name, false));
    return {
      problems,
      site: {
        id: (texts.target_id ?? "").trim() || fallbackId, name: (texts.name ?? "").trim(), area, region, attributes,
        upstream: (texts.upstream_gauge ?? "").trim(), downstream: (texts.downstream_gauge ?? "").trim(),
        latitude: degrees("latitude"), longitude: degrees("longitude"),
      },
    };
  }

  function estimate(site) {
    return { site, ...estimateSite(models, site, unit.flow_in_m3s), skew: skewAtSite(models.skew_model, site, study.skew) };
  }

  function resultRows(found) {
    const skew = [found.skew?.skew ?? "", found.skew?.mse ?? ""];
    if (!found.rows.length) return [[found.site.id, found.site.name, "", "", "", "", "", "", "", found.warnings.join("; "), ...skew]];
    return found.rows.map((row) => [found.site.id, found.site.name, row.aep, row.route, row.flow, row.lower, row.upper, row.se_log10, row.adopted, row.warnings, ...skew]);
  }

  function field(name, label, input, hint) {
    input.id = `calc-${name}`;
    input.name = name;
    const described = hint ? `calc-${name}-hint` : null;
    if (described) input.setAttribute("aria-describedby", described);
    return make("div", { class: "field" }, make("label", { for: input.id }, label), input, hint ? make("small", { id: described }, hint) : null);
  }

  function buildForm() {
    const form = document.getElementById("calc-form"), fields = document.getElementById("calc-fields");
    const textInput = (extra = {}) => make("input", { type: "text", autocomplete: "off", ...extra });
    const label = (name) => plain(name) + (unitOf(name) ? `, ${unitOf(name)}` : "");
    const hint = (name) => {
      const range = rangeOf(name), meaning = settings.attributes[name]?.meaning;
      return [meaning, range && `gauges: ${wordNumber(range[0])} to ${wordNumber(range[1])}`].filter(Boolean).join("; ");
    };
    fields.append(field("name", "name of the site (free)", textInput()));
    fields.append(field("area", label("area"), textInput({ inputmode: "decimal", required: true }), hint("area")));
    for (const name of needed) fields.append(field(name, label(name), textInput({ inputmode: "decimal", required: true }), hint(name)));
    for (const name of optional) fields.append(field(name, label(name), textInput({ inputmode: "decimal" }), `${hint(name)}; for the generalized skew alone`));
    if (byRegion) {
      const select = make("select", { required: true }, make("option", { value: "" }, "choose"), ...regions.map((name) => make("option", { value: name }, name)));
      fields.append(field("region", "region", select, "its pool gives the growth curve"));
    }
    if (needsPlace) for (const name of ["latitude", "longitude"]) fields.append(field(name, `${name}, degrees`, textInput({ inputmode: "decimal" }), "for the generalized skew alone"));
    if (gauges.length) {
      const known = make("datalist", { id: "calc-gauges" }, ...gauges.map((id) => make("option", { value: id })));
      fields.append(known);
      for (const name of ["upstream_gauge", "downstream_gauge"]) fields.append(field(name, plain(name) + " (if any)", textInput({ list: "calc-gauges" }), "on the site's own stream; its record then informs the estimate"));
    }
    form.addEventListener("submit", (event) => {
      event.preventDefault();
      const texts = Object.fromEntries([...new FormData(form)]);
      const { problems, site } = readSite(texts, "site");
      showProblems(problems.map(({ name, problem }) => ({ text: problem, target: form.elements[name] })));
      for (const input of form.elements) if (input.name) input.toggleAttribute("aria-invalid", problems.some(({ name }) => name === input.name));
      if (problems.length) form.elements[problems[0].name]?.focus();
      else showResults([estimate(site)]);
    });
    form.addEventListener("reset", () => { showProblems([]); showResults([]); });
  }

  function showProblems(problems) {
    const place = document.getElementById("calc-problems");
    place.replaceChildren();
    if (!problems.length) return;
    const shown = problems.slice(0, 20);
    place.append(
      make("p", {}, problems.length === 1 ? "One thing stands in the way:" : `${problems.length} things stand in the way:`),
      make("ul", {}, ...shown.map(({ text }) => make("li", {}, text))),
    );
    if (problems.length > shown.length) place.append(make("p", {}, `and ${problems.length - shown.length} more like these.`));
  }

  /** Read pasted or dropped CSV; sites that can be estimated are, the others are explained by their row. */
  function readMany(text) {
    const rows = readCsv(text);
    if (rows.length < 2) return showFaults(["The text has no table: write a header row, then a row for every site, as in the example."]);
    const head = rows[0].map((name) => name.toLowerCase().replace(/\s+/g, "_"));
    const missing = ["area", ...needed, ...(byRegion ? ["region"] : [])].filter((name) => !head.includes(name.toLowerCase()));
    if (missing.length) return showFaults([`The header row lacks ${missing.join(", ")}; it has ${rows[0].join(", ")}.`]);
    const twice = head.filter((name, i) => name && head.indexOf(name) !== i);
    if (twice.length) return showFaults([`The header row names ${[...new Set(twice)].join(", ")} twice.`]);
    const proper = new Map([...needed, ...optional].map((name) => [name.toLowerCase(), name]));
    const faults = [], found = [];
    rows.slice(1).forEach((cells, n) => {
      if (cells.length > head.length) {
        faults.push(`Row ${n + 2} has ${cells.length} cells, the header ${head.length}: is there a comma inside a number or a name? Write decimals after a point, names with commas in quotes.`);
        return;
      }
      const texts = {};
      head.forEach((name, column) => { texts[proper.get(name) ?? name] = unquote(cells[column] ?? ""); });
      const { problems, site } = readSite(texts, `row ${n + 2}`);
      if (problems.length) faults.push(...problems.map(({ problem }) => `Row ${n + 2}: ${problem}`));
      else found.push(estimate(site));
    });
    showProblems(faults.map((text) => ({ text })));
    showResults(found);
  }

  const unquote = (text) => (/^'[=+\-@]/.test(text) ? text.slice(1) : text);

  function showFaults(texts) {
    showProblems(texts.map((text) => ({ text })));
    if (texts.length) showResults([]);
  }

  function showResults(found) {
    results = found;
    const place = document.getElementById("calc-results");
    place.replaceChildren();
    document.getElementById("calc-actions").hidden = !found.length;
    if (!found.length) return;
    place.append(...(found.length === 1 ? oneSite(found[0]) : manySites(found)));
    for (const table of place.querySelectorAll("table")) window.equipTable(table);
    const warned = found.filter((one) => one.warnings.length).length;
    announce(`${found.length === 1 ? "The site is" : found.length + " sites are"} estimated${warned ? `; ${warned === 1 && found.length === 1 ? "it has" : warned + " have"} warnings` : ""}.`);
  }

  function oneSite({ site, rows, warnings, adopted, skew }) {
    const parts = [make("h3", {}, site.name || "The site")];
    const all = [...new Set([...warnings, ...rows.flatMap((row) => row.warnings.split("; "))].filter(Boolean))];
    if (all.length) parts.push(make("div", { class: "site-notes", role: "alert" }, make("h4", {}, "What to know before use"), make("ul", {}, ...all.map((text) => make("li", {}, text)))));
    if (!rows.length) return parts;
    const routes = [...new Set(rows.map((row) => row.route))].sort((a, b) => Number(b === adopted) - Number(a === adopted));
    const cell = (aep, route) => {
      const row = rows.find((one) => one.aep === aep && one.route === route);
      return make("td", { class: route === adopted ? "n adopted" : "n" }, `${wordNumber(row.flow)} (${wordNumber(row.lower)} – ${wordNumber(row.upper)})`);
    };
    parts.push(tableOf(
      `Floods in ${unit.flow}, with their ${percent} intervals`,
      ["AEP", ...routes.map((route) => plain(route) + (route === adopted ? ", adopted" : ""))],
      settings.aeps.targets.map((aep) => make("tr", {}, make("th", { scope: "row", class: "n" }, wordProbability(aep)), ...routes.map((route) => cell(aep, route)))),
      "Floods of the site",
    ));
    if (skew) parts.push(make("p", {}, `Generalized skew ${skew.skew.toFixed(3).replace("-", "\u2212")}, mean square error ${wordNumber(skew.mse)} (${skew.how}).`));
    return parts;
  }

  function manySites(found) {
    const shown = [0.1, 0.02, 0.01].filter((aep) => settings.aeps.targets.includes(aep));
    const aeps = shown.length ? shown : settings.aeps.targets.slice(-3);
    const rows = found.map(({ site, rows: own, adopted, warnings }) => {
      const at = (aep) => own.find((row) => row.aep === aep && row.route === adopted);
      const text = (row) => (row ? `${wordNumber(row.flow)} (${wordNumber(row.lower)} – ${wordNumber(row.upper)})` : "none");
      return make("tr", {}, make("th", { scope: "row" }, site.id), make("td", {}, site.name), make("td", {}, adopted ? plain(adopted) : "none"), ...aeps.map((aep) => make("td", { class: "n" }, text(at(aep)))), make("td", {}, warnings.join("; ")));
    });
    return [
      make("h3", {}, `${found.length} sites`),
      tableOf(`Adopted floods in ${unit.flow}, with their ${percent} intervals; copy and download hold every probability and route`, ["site", "name", "route", ...aeps.map((aep) => `${wordProbability(aep)} AEP`), "warnings"], rows, "Floods of the sites"),
    ];
  }

  function tableOf(caption, head, rows, title) {
    const numeric = (i) => (rows[0]?.cells[i]?.classList.contains("n") ? "n" : "");
    return make("div", { class: "table", role: "region", "aria-label": title, tabindex: "0" },
      make("table", { "data-title": title }, make("caption", {}, caption), make("thead", {}, make("tr", {}, ...head.map((text, i) => make("th", { scope: "col", class: numeric(i) }, text)))), make("tbody", {}, ...rows)));
  }

  const csv = () => writeCsv([HEAD, ...results.flatMap(resultRows)]);

  function start() {
    buildForm();
    const area = document.getElementById("calc-paste"), drop = document.getElementById("calc-drop");
    const columns = ["target_id", "name", "area", ...needed, ...optional, ...(byRegion ? ["region"] : []), ...(gauges.length ? ["upstream_gauge", "downstream_gauge"] : [])];
    document.getElementById("calc-columns").textContent = columns.join(",");
    document.getElementById("calc-many").addEventListener("click", () => readMany(area.value));
    const take = async (file) => {
      if (!file) return;
      if (file.size > 20e6) return showFaults([`${file.name} is larger than 20 MB; give a table of sites.`]);
      area.value = await file.text();
      readMany(area.value);
    };
    document.getElementById("calc-file").addEventListener("change", (event) => take(event.target.files[0]));
    for (const kind of ["dragover", "dragleave", "drop"]) drop.addEventListener(kind, (event) => {
      event.preventDefault();
      drop.classList.toggle("over", kind === "dragover");
      if (kind === "drop") take(event.dataTransfer.files[0]);
    });
    document.getElementById("calc-copy").addEventListener("click", async () => announceCopy(await copyText(csv().replaceAll("\r\n", "\n"))));
    document.getElementById("calc-download").addEventListener("click", () => download("estimates.csv", csv()));
  }

  function announceCopy(done) {
    const text = done ? "Copied as CSV." : "The browser does not allow copying; use the download.";
    document.getElementById("calc-told").textContent = text;
  }

  start();
  return { readMany, csv, estimate, readSite };
})();
