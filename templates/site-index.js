"use strict";
(() => {
  // Finds, filters and sorts the rows of one table. Without this script the whole table stands there.
  const PAGE = 200;
  const form = document.querySelector(".finder form");
  if (!form) return;
  const table = document.getElementById(form.dataset.for);
  const body = table.tBodies[0];
  const also = JSON.parse(document.getElementById("site-data").textContent).also;
  const said = form.querySelector(".found");
  const more = document.querySelector(".more");
  const filters = [...form.querySelectorAll("select")];
  const find = form.elements.find;
  // Hyphens and blanks inside a tag do not matter: tic2014 finds TIC-2014.
  const plain = (text) => text.toLowerCase().replace(/[-\u2010-\u2015_/.]/g, "");
  const rows = [...body.rows].map((row, index) => ({
    row, index, name: plain(row.cells[0].textContent), shown: plain(row.textContent), also: also[index] || "",
    own: plain((also[index] || "").split("\n")[0]), all: plain(row.textContent + " " + (also[index] || "")),
  }));
  let order = rows;
  let sorted = false;
  let inOrder = true;
  let printed = rows;
  let limit = PAGE;

  function fits(entry, words) {
    for (const filter of filters) {
      const wanted = filter.value;
      if (!wanted) continue;
      const has = entry.row.dataset[filter.name] || "";
      if (filter.name === "state" ? !has.split(" ").includes(wanted) : has !== wanted) return false;
    }
    return words.every((word) => entry.all.includes(word));
  }

  // What a row was found by, where the row itself does not show it.
  function tell(entry, words) {
    const old = entry.row.querySelector(".match");
    if (old) old.remove();
    const hidden = words.filter((word) => !entry.shown.includes(word));
    if (!hidden.length) return;
    const lines = entry.also.split("\n");
    const line = lines.find((text) => hidden.every((word) => plain(text).includes(word))) ||
      lines.find((text) => hidden.some((word) => plain(text).includes(word)));
    if (!line) return;
    const note = document.createElement("span");
    note.className = "match";
    note.textContent = line.length > 160 ? line.slice(0, 160) + " …" : line;
    entry.row.cells[1].append(note);
  }

  // What is asked for by name stands first, what only mentions it last.
  function rank(entry, words) {
    const at = ["name", "shown", "own"].findIndex((where) => words.every((word) => entry[where].includes(word)));
    return at < 0 ? 3 : at;
  }

  function show() {
    const words = find.value.trim().split(/\s+/).map(plain).filter(Boolean);
    let found = order.filter((entry) => fits(entry, words));
    if (words.length && !sorted) {
      found.forEach((entry) => { entry.rank = rank(entry, words); });
      found = found.sort((a, b) => a.rank - b.rank || a.index - b.index);
    }
    const seen = new Set(found.slice(0, limit));
    const beyond = new Set(found.slice(limit));
    // Only what is seen is moved: to put a large table together anew takes long.
    const moved = words.length || sorted;
    if (moved) body.prepend(...[...seen].map((entry) => entry.row));
    else if (!inOrder) body.append(...rows.map((entry) => entry.row));
    inOrder = !moved;
    printed = moved ? found : rows;
    for (const entry of rows) {
      const hidden = !seen.has(entry);
      if (entry.row.hidden !== hidden) entry.row.hidden = hidden;
      if (hidden && entry.row.classList.contains("paged") !== beyond.has(entry)) entry.row.classList.toggle("paged");
      if (!hidden) tell(entry, words);
    }
    const noun = form.dataset.noun;
    said.textContent = `${found.length} of ${rows.length} ${noun}` + (beyond.size ? `, the first ${limit} shown` : "");
    more.hidden = !beyond.size;
  }

  function remember() {
    const parts = [find, ...filters].filter((field) => field.value)
      .map((field) => `${field.name}=${encodeURIComponent(field.value)}`);
    history.replaceState(null, "", parts.length ? `#${parts.join("&")}` : location.pathname.split("/").pop() || "#");
  }

  function recall() {
    for (const part of location.hash.slice(1).split("&")) {
      const [name, value] = part.split("=");
      const field = form.elements[name];
      if (!field || value === undefined) continue;
      try { field.value = decodeURIComponent(value); } catch { field.value = ""; }
    }
  }

  const heads = [...table.tHead.rows[0].cells];
  const compare = new Intl.Collator("en", { numeric: true }).compare;
  heads.forEach((head, column) => {
    if ("plain" in head.dataset) return;
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = head.textContent;
    head.replaceChildren(button);
    button.addEventListener("click", () => {
      const was = head.getAttribute("aria-sort");
      // Counts are asked for from the top, names from the start; a third press gives the order of the register.
      const first = rows.some((entry) => entry.row.cells[column].matches(".number, [data-sort]")) ? "descending" : "ascending";
      const second = first === "ascending" ? "descending" : "ascending";
      const now = !was ? first : was === first ? second : null;
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      order = [...rows];
      sorted = Boolean(now);
      if (now) {
        head.setAttribute("aria-sort", now);
        const keys = rows.map((entry) => {
          const cell = entry.row.cells[column];
          return cell.dataset.sort ?? cell.textContent.trim();
        });
        const turn = now === "ascending" ? 1 : -1;
        // Rows that say nothing stand last whichever way.
        order.sort((a, b) => (!keys[a.index] - !keys[b.index]) || turn * compare(keys[a.index], keys[b.index]) || a.index - b.index);
      }
      show();
    });
  });

  let waiting = 0;
  function changed() {
    limit = PAGE;
    show();
    remember();
  }
  form.addEventListener("input", () => { clearTimeout(waiting); waiting = setTimeout(changed, rows.length > 2000 ? 150 : 0); });
  // Enter leads to what was found.
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    clearTimeout(waiting);
    changed();
    const first = body.querySelector("tr:not([hidden]) th a");
    if (first) first.focus();
  });
  form.addEventListener("reset", () => setTimeout(changed));
  more.querySelector("button").addEventListener("click", () => { limit += PAGE; show(); });
  // On paper stand those rows too that the screen leaves for later, in the same order.
  addEventListener("beforeprint", () => { if (!inOrder) body.prepend(...printed.map((entry) => entry.row)); });
  addEventListener("hashchange", () => { recall(); show(); });
  // On a narrow screen what is looked for should not stand a page below the field.
  const folded = document.querySelector(".of-units");
  if (folded && matchMedia("(max-width: 50rem)").matches) folded.open = false;
  recall();
  form.parentElement.hidden = false;
  show();
})();
