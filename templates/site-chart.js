"use strict";
(() => {
  // Lights up the row and the column of a mark, and says in words what the mark means.
  const marks = JSON.parse(document.getElementById("site-data").textContent).marks;
  for (const table of document.querySelectorAll("table.chart")) {
    const heads = [...table.tHead.querySelectorAll(".effect")];
    const rows = [...table.tBodies].flatMap((body) => [...body.rows]).map((row) => ({
      row, body: row.parentElement, cells: [...row.querySelectorAll(".mark")],
    }));
    const cells = rows.flatMap((entry) => entry.cells);
    if (!cells.length) continue;
    const said = document.createElement("p");
    said.className = "chart-said";
    said.setAttribute("role", "status");
    said.textContent = "Point at a mark, or go to one with Tab and the arrow keys, to see its row and column.";
    table.after(said);

    const lines = (cell) => {
      const parts = [""];
      for (const node of cell.childNodes) {
        if (node.nodeName === "BR") parts.push("");
        else parts[parts.length - 1] += node.textContent;
      }
      return parts.map((part) => part.trim()).filter(Boolean);
    };
    const text = (cell) => lines(cell).join(" ");
    const heading = (column) => lines(heads[column].querySelector(".turned")).join(" ");

    function meaning(cell) {
      const [mark, ...rest] = lines(cell);
      if (!mark) return "does nothing to";
      const means = marks[mark];
      const forced = (means ? rest : [mark, ...rest]).filter((part) => /%/.test(part));
      return [means || (forced.length ? "forces the output" : mark), ...forced.map((part) => `to ${part}`)].join(" ") + ":";
    }

    function clear() {
      for (const cell of table.querySelectorAll(".in-row, .in-column, .at")) cell.classList.remove("in-row", "in-column", "at");
    }

    function light(entry, column) {
      clear();
      const lead = entry.body.rows[0].cells[0];
      for (const cell of entry.row.cells) cell.classList.add("in-row");
      lead.classList.add("in-row");
      if (column < 0) {
        const does = entry.cells.map((cell, at) => text(cell) && `${text(cell)} ${heading(at)}`).filter(Boolean);
        said.textContent = `${text(lead)}. ${does.join("; ")}`;
        return;
      }
      heads[column].classList.add("in-column");
      for (const other of rows) if (other.cells[column]) other.cells[column].classList.add("in-column");
      entry.cells[column].classList.add("at");
      said.textContent = `${text(lead)}, ${meaning(entry.cells[column])} ${heading(column)}.`;
    }

    function column(at) {
      clear();
      heads[at].classList.add("in-column");
      const tripped = new Set();
      for (const entry of rows) {
        if (!entry.cells[at]) continue;
        entry.cells[at].classList.add("in-column");
        if (text(entry.cells[at])) tripped.add(text(entry.body.rows[0].cells[0]));
      }
      said.textContent = `${heading(at)}: ${tripped.size ? [...tripped].join("; ") : "no interlock of this chart acts on it"}.`;
    }

    table.addEventListener("pointerover", (event) => {
      const cell = event.target.closest("td, th");
      if (!cell) return;
      const head = heads.indexOf(cell);
      if (head >= 0) return column(head);
      const entry = rows.find((one) => one.row === cell.parentElement);
      if (entry) light(entry, entry.cells.indexOf(cell));
    });
    table.addEventListener("pointerleave", () => { if (!table.contains(document.activeElement)) clear(); });

    // One stop for the Tab key; the arrow keys go on from there.
    const stops = [heads, ...rows.map((entry) => entry.cells)];
    stops.flat().forEach((cell) => { cell.tabIndex = -1; });
    (cells.find((cell) => text(cell)) || cells[0]).tabIndex = 0;
    const go = (to) => {
      stops.flat().forEach((cell) => { cell.tabIndex = -1; });
      to.tabIndex = 0;
      to.focus();
    };
    table.addEventListener("focusin", (event) => {
      const y = stops.findIndex((row) => row.includes(event.target));
      if (y < 0) return;
      const x = stops[y].indexOf(event.target);
      if (y === 0) column(x); else light(rows[y - 1], x);
    });
    table.addEventListener("keydown", (event) => {
      const y = stops.findIndex((row) => row.includes(event.target));
      if (y < 0) return;
      const x = stops[y].indexOf(event.target);
      const [right, down] = { ArrowRight: [1, 0], ArrowLeft: [-1, 0], ArrowDown: [0, 1], ArrowUp: [0, -1] }[event.key] || [0, 0];
      let to = null;
      if (event.key === "Home") to = stops[y][0];
      else if (event.key === "End") to = stops[y].at(-1);
      else if (right || down) to = (stops[y + down] || [])[x + right];
      if (!to) return;
      event.preventDefault();
      go(to);
    });
  }
})();
