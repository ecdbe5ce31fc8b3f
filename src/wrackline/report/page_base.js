/* What all scripts of the page share: the embedded data, elements, wording of numbers, CSV. */
"use strict";

const study = JSON.parse(document.getElementById("study-data").textContent);

/** Make an element; texts become text nodes, so nothing that a user wrote can become markup. */
function make(tag, properties = {}, ...children) {
  const element = document.createElement(tag);
  for (const [name, value] of Object.entries(properties)) {
    if (name === "class") element.className = value;
    else if (name.startsWith("on")) element.addEventListener(name.slice(2), value);
    else if (value === true) element.setAttribute(name, "");
    else if (value !== false && value !== null && value !== undefined) element.setAttribute(name, value);
  }
  element.append(...children.filter((child) => child !== null && child !== undefined));
  return element;
}

/** Word a number with three significant digits, thousands parted, as the page's tables do. */
function wordNumber(value, digits = 3) {
  if (value === null || value === undefined || !Number.isFinite(value)) return "";
  if (value === 0) return "0";
  const size = Math.floor(Math.log10(Math.abs(Number(value.toPrecision(digits)))));
  const rounded = Number(value.toPrecision(digits)).toFixed(Math.max(0, digits - 1 - size));
  const [whole, rest] = rounded.replace("-", "").split(".");
  const parted = whole.length > 4 ? whole.replace(/\B(?=(\d{3})+$)/g, "\u202f") : whole;
  return (value < 0 ? "\u2212" : "") + parted + (rest ? "." + rest : "");
}

/** Word an annual exceedance probability as a percentage. */
function wordProbability(p) {
  return Number((100 * p).toPrecision(6)) + "\u202f%";
}

/** Word a short fixed name for reading. */
function plain(name) {
  return name.replaceAll("_", " ");
}

/** Render rows as CSV; text that a spreadsheet would take for a formula gets a leading apostrophe. */
function writeCsv(rows) {
  const number = /^[-+]?(\d+\.?\d*|\.\d+)(e[-+]?\d+)?$/i;
  const cell = (value) => {
    let text = value === null || value === undefined ? "" : String(value);
    if (/^[=+\-@\t\r]/.test(text) && !number.test(text)) text = "'" + text;
    return /[",\r\n]/.test(text) ? '"' + text.replaceAll('"', '""') + '"' : text;
  };
  return rows.map((row) => row.map(cell).join(",")).join("\r\n") + "\r\n";
}

/** Read CSV text into rows of cells; commas, semicolons or tabs, whichever the first line has most of. */
function readCsv(text) {
  const source = text.replace(/^\ufeff/, "");
  const first = source.split(/\r?\n/, 1)[0];
  const count = (mark) => first.split(mark).length;
  const mark = [",", ";", "\t"].reduce((best, other) => (count(other) > count(best) ? other : best));
  const rows = [[]];
  let cell = "", quoted = false;
  for (let at = 0; at < source.length; at++) {
    const letter = source[at];
    if (quoted) {
      if (letter !== '"') cell += letter;
      else if (source[at + 1] === '"') { cell += '"'; at++; }
      else quoted = false;
    } else if (letter === '"' && cell === "") quoted = true;
    else if (letter === mark) { rows.at(-1).push(cell); cell = ""; }
    else if (letter === "\n") { rows.at(-1).push(cell); cell = ""; rows.push([]); }
    else if (letter !== "\r") cell += letter;
  }
  rows.at(-1).push(cell);
  return rows.map((row) => row.map((value) => value.trim())).filter((row) => row.some((value) => value !== ""));
}

/** Hand a text to the reader as a file. */
function download(name, text) {
  const address = URL.createObjectURL(new Blob(["\ufeff", text], { type: "text/csv;charset=utf-8" }));
  const link = make("a", { href: address, download: name });
  document.body.append(link);
  link.click();
  link.remove();
  setTimeout(() => URL.revokeObjectURL(address), 1000);
}

/** Put a text on the clipboard, also where the page is a plain file and the modern way is barred. */
async function copyText(text) {
  try {
    await navigator.clipboard.writeText(text);
    return true;
  } catch {
    const area = make("textarea", { class: "offscreen", "aria-hidden": "true" });
    area.value = text;
    document.body.append(area);
    area.select();
    const done = document.execCommand("copy");
    area.remove();
    return done;
  }
}

/** A colour of the page's style sheet as it is now, light or dark. */
function colour(name) {
  return getComputedStyle(document.documentElement).getPropertyValue("--" + name).trim();
}

/** Say something to a reader who listens to the page. */
function announce(text) {
  document.getElementById("announcer").textContent = text;
}
