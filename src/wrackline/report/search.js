/* Finding a site by name or number, links to one site, and the start of it all. */
"use strict";

(() => {
  const sites = study.sites, MOST = 12;
  const field = document.getElementById("site-search"), list = document.getElementById("site-options");
  const fold = (text) => text.normalize("NFKD").replace(/\p{M}/gu, "").toLowerCase();
  const texts = sites.id.map((id, i) => fold(`${id} ${sites.name[i]}`));
  let found = [], active = -1;

  function search(wanted) {
    const words = fold(wanted).split(/\s+/).filter(Boolean);
    if (!words.length) return [];
    const hits = texts.map((_, i) => i).filter((i) => words.every((one) => texts[i].includes(one)));
    const start = (i) => Number(!texts[i].startsWith(words[0]));
    return hits.sort((a, b) => start(a) - start(b) || a - b);
  }

  function close() {
    list.hidden = true;
    active = -1;
    field.setAttribute("aria-expanded", "false");
    field.removeAttribute("aria-activedescendant");
  }

  function open() {
    const hits = search(field.value);
    found = hits.slice(0, MOST);
    const options = found.map((i, n) => {
      const option = make("li", { role: "option", id: `site-option-${n}`, "aria-selected": "false" }, sitePanel.title(i), sites.kind[i] === "t" ? make("small", {}, " ungauged") : "");
      option.addEventListener("pointerdown", (event) => { event.preventDefault(); choose(i); });
      return option;
    });
    list.replaceChildren(...options);
    list.hidden = !options.length;
    field.setAttribute("aria-expanded", String(!list.hidden));
    active = -1;
    const more = hits.length - found.length;
    document.getElementById("search-count").textContent = !field.value.trim() ? "" : hits.length ? (more > 0 ? `${hits.length} sites, the first ${MOST} are listed` : "") : "No site has this name or number.";
  }

  function step(by) {
    if (!found.length) return;
    active = (active + by + found.length) % found.length;
    [...list.children].forEach((option, n) => option.setAttribute("aria-selected", String(n === active)));
    list.children[active].scrollIntoView({ block: "nearest" });
    field.setAttribute("aria-activedescendant", `site-option-${active}`);
  }

  function choose(i) {
    field.value = sites.id[i];
    document.getElementById("search-count").textContent = "";
    close();
    pick(i);
  }

  field.addEventListener("input", open);
  field.addEventListener("blur", close);
  field.addEventListener("keydown", (event) => {
    if (event.key === "ArrowDown") { if (list.hidden) open(); step(1); }
    else if (event.key === "ArrowUp") step(-1);
    else if (event.key === "Enter" && found.length && field.value.trim()) choose(found[Math.max(0, active)]);
    else if (event.key === "Escape") close();
    else return;
    event.preventDefault();
  });

  function pick(i, told = true) {
    studyMap.mark(i);
    sitePanel.show(i);
    if (told) history.replaceState(null, "", "#site=" + encodeURIComponent(sites.id[i]));
    if (matchMedia("(max-width: 70rem)").matches) document.getElementById("site-panel").scrollIntoView({ block: "nearest", behavior: "smooth" });
  }

  /** Follow a link to one site; an unknown one is said, not passed over. */
  function follow() {
    const match = location.hash.match(/^#site=(.*)$/);
    if (!match) return;
    let wanted = match[1];
    try { wanted = decodeURIComponent(match[1]); } catch { /* as it stands */ }
    const i = sites.id.indexOf(wanted);
    document.getElementById("map-section").scrollIntoView();
    if (i >= 0) pick(i, false);
    else document.getElementById("search-count").textContent = `The link names a site that this study does not have: ${wanted}`;
  }

  embedFrames().then(() => {
    document.documentElement.classList.add("lively");
    paintFrames();
    studyMap.start(pick);
    follow();
    addEventListener("hashchange", follow);
    const repaint = () => { paintFrames(); studyMap.repaint(); sitePanel.repaint(); };
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", repaint);
    document.getElementById("map-section").dataset.ready = "yes";
  });
})();
