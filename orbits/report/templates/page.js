"use strict";
// Tables are sorted by a click on the head of a column, numbers by value and text by letters.
for (const table of document.querySelectorAll("table.sortable")) {
  const heads = [...table.tHead.rows[0].cells];
  heads.forEach((head, column) => {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = head.textContent;
    head.replaceChildren(button);
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const rows = [...table.tBodies[0].rows];
      rows.sort((a, b) => compare(a.cells[column], b.cells[column]) * (down ? -1 : 1));
      table.tBodies[0].append(...rows);
    });
  });
}

function compare(a, b) {
  const [x, y] = [Number(a.dataset.value), Number(b.dataset.value)];
  if (Number.isNaN(x) || Number.isNaN(y)) return a.textContent.localeCompare(b.textContent);
  return x - y;
}

// A position on the drawing, its line in the table and its map belong together.
for (const dot of document.querySelectorAll("use.position")) {
  const mine = `[data-night="${dot.dataset.night}"]:not(use)`;
  const show = (on) => document.querySelectorAll(mine).forEach((e) => e.classList.toggle("chosen", on));
  dot.addEventListener("pointerenter", () => show(true));
  dot.addEventListener("pointerleave", () => show(false));
  dot.addEventListener("focus", () => show(true));
  dot.addEventListener("blur", () => show(false));
  dot.addEventListener("click", () => {
    document.querySelector(`tr${mine}`)?.scrollIntoView({ block: "center" });
    show(true);
  });
}
