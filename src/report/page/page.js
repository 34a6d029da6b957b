"use strict";
// Everything can be read without this script. It sorts and filters the tables,
// makes each picture one stop of the Tab key, and shows what is pointed at.
(() => {
  const all = (selector, within = document) => [...within.querySelectorAll(selector)];

  // Tables: a button in each heading that sorts.
  for (const table of all("table.sorts")) {
    const body = table.tBodies[0];
    const headings = all("thead th", table);
    headings.forEach((heading, column) => {
      if (!heading.dataset.sort) return;
      const button = document.createElement("button");
      button.type = "button";
      button.append(...heading.childNodes);
      heading.append(button);
      button.addEventListener("click", () => {
        const falls = heading.getAttribute("aria-sort") === "ascending";
        headings.forEach((h) => h.removeAttribute("aria-sort"));
        heading.setAttribute("aria-sort", falls ? "descending" : "ascending");
        const key = (row) => row.cells[column].dataset.v;
        const rows = [...body.rows];
        const numbers = rows.every((row) => key(row) !== "" && !Number.isNaN(Number(key(row))));
        rows.sort((a, b) => {
          const order = numbers ? key(a) - key(b) : key(a).localeCompare(key(b), "en", { numeric: true });
          return falls ? -order : order;
        });
        body.append(...rows);
      });
    });
  }

  // Tones: find words, show verdicts.
  const filters = new Map();
  for (const tools of all(".tools")) {
    const section = tools.closest("section");
    const rows = all("tbody tr", section);
    const find = tools.querySelector("[data-find]");
    const boxes = all("[data-verdict]", tools);
    const shown = tools.querySelector(".shown");
    const apply = () => {
      const words = find.value.toLowerCase().split(/\s+/).filter(Boolean);
      const verdicts = new Set(boxes.filter((b) => b.checked).map((b) => b.dataset.verdict));
      let count = 0;
      for (const row of rows) {
        const text = row.dataset.words.toLowerCase();
        row.hidden = !(verdicts.has(row.dataset.is) && words.every((w) => text.includes(w)));
        if (!row.hidden) count += 1;
      }
      shown.textContent = `${count} of ${rows.length} tones shown`;
    };
    find.addEventListener("input", apply);
    boxes.forEach((box) => box.addEventListener("change", apply));
    filters.set(section, () => {
      find.value = "";
      boxes.forEach((box) => { box.checked = true; });
      apply();
    });
    apply();
    tools.hidden = false;
  }
  all(".keys").forEach((keys) => { keys.hidden = false; });

  // A link to a tone reaches its row even if the filter hides it.
  const arrive = () => {
    const id = decodeURIComponent(location.hash.slice(1));
    const row = id && document.getElementById(id);
    if (!row || row.tagName !== "TR") return;
    if (row.hidden) filters.get(row.closest("section"))?.();
    row.focus({ preventScroll: true });
    row.scrollIntoView({ block: "center" });
  };
  addEventListener("hashchange", arrive);
  arrive();

  // What belongs to one tone lights up together.
  const byTone = new Map();
  for (const element of all("[data-tone]")) {
    const tone = element.dataset.tone;
    if (!byTone.has(tone)) byTone.set(tone, []);
    byTone.get(tone).push(element);
  }
  let lit = null;
  const light = (tone) => {
    if (tone === lit) return;
    (byTone.get(lit) || []).forEach((e) => e.classList.remove("hot"));
    (byTone.get(tone) || []).forEach((e) => e.classList.add("hot"));
    lit = tone;
  };
  const toneAt = (target) => target.closest?.("[data-tone]")?.dataset.tone ?? null;
  addEventListener("pointerover", (event) => light(toneAt(event.target)));
  addEventListener("focusin", (event) => light(toneAt(event.target)));

  // Pictures: one stop of the Tab key, arrows from mark to mark, numbers below.
  for (const figure of all("figure.pictures")) {
    const readout = figure.querySelector(".readout");
    const rest = readout.dataset.rest || "\u00a0";
    const say = (text) => {
      readout.textContent = text || rest;
      readout.classList.toggle("on", Boolean(text));
    };
    say("");
    figure.addEventListener("pointerover", (event) => {
      const mark = event.target.closest?.(".mark");
      if (mark) say(mark.getAttribute("aria-label"));
    });
    figure.addEventListener("pointerleave", () => say(""));
    // On the figure: an SVG that listens for the focus would take it.
    figure.addEventListener("focusin", (event) => {
      const mark = event.target.closest(".mark");
      if (mark) say(mark.getAttribute("aria-label"));
    });
    figure.addEventListener("focusout", () => say(""));
    for (const picture of all("svg.picture", figure)) {
      // By tone, not in the order in which they are painted.
      const marks = all("a.mark", picture);
      marks.sort((a, b) => a.dataset.tone.localeCompare(b.dataset.tone, "en", { numeric: true }));
      const stop = (mark) => marks.forEach((m) => m.setAttribute("tabindex", m === mark ? "0" : "-1"));
      stop(marks[0]);
      figure.addEventListener("keydown", (event) => {
        const here = marks.indexOf(event.target.closest(".mark"));
        if (here < 0) return;
        const step = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
        let next = here + (step || 0);
        if (event.key === "Home") next = 0;
        else if (event.key === "End") next = marks.length - 1;
        else if (!step) return;
        const mark = marks[Math.min(Math.max(next, 0), marks.length - 1)];
        event.preventDefault();
        stop(mark);
        mark.focus();
      });
      // The spectrum itself: frequency and loudest level under the pointer.
      const panels = all(".panel", picture).map((panel) => ({
        sheet: panel.querySelector(".sheet"),
        tops: panel.dataset.tops.split(" "),
        topHz: Number(panel.dataset.topHz),
      }));
      picture.addEventListener("pointermove", (event) => {
        if (event.target.closest?.(".mark")) return;
        for (const { sheet, tops, topHz } of panels) {
          const box = sheet.getBoundingClientRect();
          if (event.clientY < box.top || event.clientY > box.bottom) continue;
          const share = (event.clientX - box.left) / box.width;
          if (share < 0 || share >= 1) continue;
          const width = topHz / tops.length;
          const column = Math.floor(share * tops.length);
          const from = column * width;
          const digits = Math.max(0, Math.ceil(-Math.log10(width)) + 1);
          say(`${from.toFixed(digits)} to ${(from + width).toFixed(digits)} Hz: loudest ${tops[column].replace("-", "−")} dBFS`);
          return;
        }
        say("");
      });
    }
  }
})();
