/* Tables sort by any column, filter by text, and download; without scripts they read as they are. */
"use strict";

(() => {
  const FILTER_FROM = 11;

  const textOf = (cell) => cell.textContent.trim();

  /** A cell's number for sorting; NaN where it is text. An interval counts by its first number. */
  function numberOf(text) {
    const bare = text.replaceAll("\u202f", "").replaceAll("\u2212", "-").replace(/^[<>≤≥~±]\s*/, "");
    const match = bare.match(/^-?\d+(\.\d+)?(e[-+]?\d+)?(?=$|[\s%(–])/i);
    return match ? Number(match[0]) : NaN;
  }

  const blank = (text) => text === "" || text === "–" || text === "—";

  function compare(a, b, numeric) {
    if (blank(a) || blank(b)) return Number(blank(a)) - Number(blank(b));
    if (!numeric) return a.localeCompare(b, undefined, { numeric: true });
    const x = numberOf(a), y = numberOf(b);
    if (Number.isNaN(x) || Number.isNaN(y)) return Number(Number.isNaN(x)) - Number(Number.isNaN(y)) || a.localeCompare(b);
    return x - y;
  }

  function sortBy(table, column, header) {
    const up = header.getAttribute("aria-sort") !== "ascending";
    const body = table.tBodies[0], rows = [...body.rows];
    const texts = new Map(rows.map((row) => [row, row.cells[column] ? textOf(row.cells[column]) : ""]));
    const known = [...texts.values()].filter((text) => !blank(text));
    const identifiers = known.some((text) => /^0\d/.test(text));
    const numeric = !identifiers && known.filter((text) => !Number.isNaN(numberOf(text))).length > known.length / 2;
    rows.sort((a, b) => {
      const [x, y] = [texts.get(a), texts.get(b)];
      const order = compare(x, y, numeric);
      return blank(x) || blank(y) ? order : up ? order : -order;
    });
    body.append(...rows);
    for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
    header.setAttribute("aria-sort", up ? "ascending" : "descending");
  }

  function filterRows(table, wanted, count) {
    const words = wanted.toLowerCase().split(/\s+/).filter(Boolean);
    let shown = 0;
    for (const row of table.tBodies[0].rows) {
      const text = row.textContent.toLowerCase();
      row.hidden = !words.every((word) => text.includes(word));
      if (!row.hidden) shown++;
    }
    count.textContent = words.length ? `${shown} of ${table.tBodies[0].rows.length} rows` : "";
  }

  function rowsOf(table) {
    const visible = [...table.tBodies[0].rows].filter((row) => !row.hidden);
    const clean = (cell) => textOf(cell).replaceAll("\u202f", /\d\u202f%/.test(textOf(cell)) ? " " : "").replaceAll("\u2212", "-");
    return [table.tHead.rows[0], ...visible].map((row) => [...row.cells].map(clean));
  }

  function fileName(table, number) {
    const title = (table.dataset.title || table.caption?.textContent || "table").toLowerCase();
    return (title.replace(/[^\p{L}\p{N}]+/gu, "_").replace(/^_+|_+$/g, "").slice(0, 60) || `table_${number}`) + ".csv";
  }

  /** Give a table its controls; `tools` says where they go (before the table's frame by default). */
  window.equipTable = function equipTable(table, number = 0) {
    if (table.dataset.equipped || !table.tHead || !table.tBodies.length) return;
    table.dataset.equipped = "yes";
    for (const [column, header] of [...table.tHead.rows[0].cells].entries()) {
      const label = textOf(header);
      if (!label) continue;
      header.replaceChildren(make("button", { type: "button", class: "sort", title: "sort by this column", onclick: () => sortBy(table, column, header) }, label));
    }
    const title = table.dataset.title || "table";
    const tools = make("div", { class: "tools" });
    if (table.tBodies[0].rows.length >= FILTER_FROM) {
      const count = make("span", { class: "count", role: "status" });
      const field = make("input", { type: "search", placeholder: "filter rows", "aria-label": `Filter rows: ${title}` });
      let waiting = 0;
      field.addEventListener("input", () => {
        clearTimeout(waiting);
        waiting = setTimeout(() => filterRows(table, field.value, count), 80);
      });
      tools.append(field, count);
    }
    tools.append(make("button", { type: "button", class: "quiet", "aria-label": `Download as CSV: ${title}`, onclick: () => download(fileName(table, number), writeCsv(rowsOf(table))) }, "Download CSV"));
    const frame = table.closest(".table") ?? table;
    if (tools.children.length > 1) frame.before(tools);
    else {
      tools.classList.add("after");
      frame.after(tools);
    }
  };

  /* Tables far down are equipped when they come near, so that a national page opens at once. */
  const tables = [...document.querySelectorAll("main table")];
  const near = new IntersectionObserver(
    (entries) => entries.filter((entry) => entry.isIntersecting).forEach((entry) => {
      near.unobserve(entry.target);
      window.equipTable(entry.target, tables.indexOf(entry.target));
    }),
    { rootMargin: "800px" },
  );
  tables.forEach((table) => near.observe(table));
})();
