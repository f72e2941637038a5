"use strict";
(() => {
  const table = document.getElementById("signals");
  if (!table) return;
  const body = table.tBodies[0];
  const rows = Array.from(body.rows);
  const heads = Array.from(table.tHead.rows[0].cells);
  const by = id => document.getElementById(id);
  const status = by("shown");
  // what is sorted and filtered by is read once: reading cells of thousands of rows is slow
  const facts = rows.map(row => ({
    row,
    text: row.textContent.toLowerCase(),
    grade: row.dataset.g,
    values: Array.from(row.cells, cell => {
      const value = cell.dataset.v;
      if (value === undefined) return cell.textContent.trim().toLowerCase();
      return value === "" ? null : Number(value);
    }),
  }));
  const periodColumn = heads.findIndex(head => head.dataset.k === "period");
  const more = by("more");
  const STEP = 200;
  let shown = [];      // what passes the filter, in order
  let attached = 0;    // how many of these are in the table: laying out thousands of rows is slow
  const words = new Intl.Collator(undefined, {numeric: true});

  function sortBy(column, direction) {
    const sign = direction === "descending" ? -1 : 1;
    facts.sort((a, b) => {
      const x = a.values[column], y = b.values[column];
      if (x === y) return 0;
      if (x === null || x === "") return 1;   // what is not known comes last either way
      if (y === null || y === "") return -1;
      return sign * (typeof x === "number" ? x - y : words.compare(x, y));
    });
    show();
    heads.forEach((head, i) => {
      if (head.hasAttribute("aria-sort")) head.setAttribute("aria-sort", i === column ? direction : "none");
    });
  }

  function filter() {
    const text = by("f-text").value.trim().toLowerCase();
    const grade = by("f-grade").value;
    const low = parseFloat(by("f-low").value), high = parseFloat(by("f-high").value);
    for (const fact of facts) {
      const period = fact.values[periodColumn];
      fact.keep = (!text || fact.text.includes(text)) && (!grade || fact.grade === grade)
        && (isNaN(low) || (period !== null && period >= low))
        && (isNaN(high) || (period !== null && period <= high));
    }
    show();
  }

  function show() {
    shown = facts.filter(fact => fact.keep);
    attached = 0;
    body.replaceChildren();
    extend(STEP);
    status.textContent = shown.length + " of " + facts.length + " rows";
  }

  function extend(count) {
    const next = shown.slice(attached, attached + count);
    body.append(...next.map(fact => fact.row));
    attached += next.length;
    more.hidden = attached >= shown.length;
  }
  more.addEventListener("click", () => extend(STEP));
  if ("IntersectionObserver" in window)
    new IntersectionObserver(seen => { if (seen[0].isIntersecting) extend(STEP); },
      {rootMargin: "600px"}).observe(more);
  window.addEventListener("beforeprint", () => extend(Infinity));

  heads.forEach((head, column) => {
    const button = head.querySelector("button");
    if (!button) return;
    button.addEventListener("click", () => {
      const now = head.getAttribute("aria-sort");
      const first = head.dataset.first || "ascending";
      const other = first === "ascending" ? "descending" : "ascending";
      sortBy(column, now === first ? other : first);
    });
    by("f-sort").append(new Option(button.textContent, column));
  });
  by("f-sort").addEventListener("change", event => {
    const column = Number(event.target.value);
    sortBy(column, heads[column].dataset.first || "ascending");
  });
  for (const id of ["f-text", "f-grade", "f-low", "f-high"]) by(id).addEventListener("input", filter);
  by("f-clear").addEventListener("click", () => {
    for (const id of ["f-text", "f-grade", "f-low", "f-high"]) by(id).value = "";
    filter();
    by("f-text").focus();
  });

  // keyboard: / searches, arrows walk through the rows, Enter opens the row's link
  document.addEventListener("keydown", event => {
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    const typing = /^(INPUT|SELECT|TEXTAREA)$/.test(event.target.tagName);
    if (event.key === "/" && !typing) { event.preventDefault(); by("f-text").focus(); return; }
    const row = event.target.closest && event.target.closest("#signals tbody tr");
    if (event.key === "Enter" && row && event.target === row) {
      const link = row.querySelector("a");
      if (link) link.click();
      return;
    }
    if (event.key !== "ArrowDown" && event.key !== "ArrowUp") return;
    if (typing && event.target.id !== "f-text") return;
    const step = event.key === "ArrowDown" ? "nextElementSibling" : "previousElementSibling";
    if (row && event.key === "ArrowDown" && !row.nextElementSibling) extend(STEP);
    const next = row ? row[step] : (event.target.id === "f-text" && event.key === "ArrowDown" ? body.rows[0] : null);
    if (!next) return;
    event.preventDefault();
    next.focus();
  });
  filter();
})();
