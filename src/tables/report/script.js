"use strict";
// Sorting, filtering and copying. Without this script the page holds the same content in its first order.
(() => {
  const announcer = document.getElementById("announcer");

  // Sorting: by the exact number where a cell has one, by its text otherwise; what is missing comes last.
  const key = (row, at) => {
    const cell = row.cells[at];
    if (cell.classList.contains("none")) return null;
    return cell.dataset.v === undefined ? cell.textContent.trim() : Number(cell.dataset.v);
  };

  const compare = (a, b) => {
    if (typeof a !== typeof b) return typeof a === "number" ? -1 : 1;
    return a < b ? -1 : a > b ? 1 : 0;
  };

  const sorted = (rows, at, direction) => {
    const keyed = rows.map((row) => [key(row, at), row]);
    keyed.sort(([a], [b]) => {
      if (a === null || b === null) return (a === null) - (b === null);
      return direction * compare(a, b);
    });
    return keyed.map(([, row]) => row);
  };

  const NEXT = { none: "ascending", ascending: "descending", descending: "none" };

  const makeSortable = (table) => {
    const body = table.tBodies[0];
    const original = [...body.rows];
    const heads = [...table.tHead.rows[0].cells];
    heads.forEach((head, at) => {
      const name = head.textContent;
      const button = document.createElement("button");
      button.type = "button";
      button.title = `${head.title} Activate to sort.`;
      button.append(...head.childNodes);
      head.removeAttribute("title");
      head.append(button);
      head.setAttribute("aria-sort", "none");
      button.addEventListener("click", () => {
        const order = NEXT[head.getAttribute("aria-sort")];
        for (const other of heads) other.setAttribute("aria-sort", "none");
        head.setAttribute("aria-sort", order);
        const direction = order === "descending" ? -1 : 1;
        body.append(...(order === "none" ? original : sorted(original, at, direction)));
        announcer.textContent = order === "none" ? "first order" : `sorted by ${name}, ${order}`;
      });
    });
  };

  // Filtering: a row stays when it contains every word and has the chosen family and method.
  const makeFilterable = (grid) => {
    const form = grid.querySelector("form.controls");
    const table = grid.querySelector("table");
    if (!form || !table) return;
    const rows = [...table.tBodies[0].rows];
    const texts = rows.map((row) => row.textContent.toLowerCase());
    const [text, family, method] = ["text", "family", "method"].map((name) => form.querySelector(`[data-filter="${name}"]`));
    const count = form.querySelector("output");
    const apply = () => {
      const words = text.value.toLowerCase().split(/\s+/).filter(Boolean);
      const fits = (chosen, value) => chosen === "" || chosen === `=${value}`;
      let shown = 0;
      rows.forEach((row, at) => {
        const stays = fits(family.value, row.dataset.family) && fits(method.value, row.dataset.method) &&
          words.every((word) => texts[at].includes(word));
        row.hidden = !stays;
        shown += stays ? 1 : 0;
      });
      form.classList.toggle("narrowed", shown < rows.length);
      count.textContent = `${shown} of ${rows.length} rows${shown === 0 ? ": none fits" : ""}`;
      measure();
    };
    form.addEventListener("input", apply);
    form.addEventListener("submit", (event) => event.preventDefault());
    form.addEventListener("reset", () => setTimeout(apply));
    form.hidden = false;
    apply();
  };

  // Regions that have nothing to scroll need no stop of the keyboard.
  const regions = [...document.querySelectorAll(".scroll, pre")];
  const measure = () => {
    for (const region of regions) {
      const scrolls = region.scrollWidth > region.clientWidth || region.scrollHeight > region.clientHeight;
      region.tabIndex = scrolls || region.matches(":focus") ? 0 : -1;
    }
  };

  // Copying: the clipboard where it is allowed, else the old command, else the text stays selected.
  const copy = async (button) => {
    const code = document.getElementById(button.dataset.copy);
    let done = false;
    try {
      await navigator.clipboard.writeText(code.textContent);
      done = true;
    } catch {
      const range = document.createRange();
      range.selectNodeContents(code);
      const selection = getSelection();
      selection.removeAllRanges();
      selection.addRange(range);
      try {
        done = document.execCommand("copy");
      } catch {
        done = false;
      }
    }
    button.textContent = done ? "copied" : "selected";
    announcer.textContent = done ? "command copied" : "command selected, copy it with the keyboard";
    setTimeout(() => { button.textContent = "copy"; }, 3000);
  };

  // A link into something folded unfolds it.
  const unfold = () => {
    const target = document.getElementById(decodeURIComponent(location.hash.slice(1)));
    for (let part = target; part; part = part.parentElement) {
      if (part.tagName === "DETAILS") part.open = true;
    }
    if (target) target.scrollIntoView();
  };

  // Paper has nothing folded.
  let opened = [];
  const openAll = () => {
    if (opened.length > 0) return;
    opened = [...document.querySelectorAll("details:not([open])")];
    for (const part of opened) part.open = true;
  };
  const closeAgain = () => {
    for (const part of opened) part.open = false;
    opened = [];
  };
  addEventListener("beforeprint", openAll);
  addEventListener("afterprint", closeAgain);
  matchMedia("print").addEventListener("change", (event) => (event.matches ? openAll() : closeAgain()));

  for (const grid of document.querySelectorAll("[data-grid]")) {
    const table = grid.querySelector("table");
    if (table) makeSortable(table);
    makeFilterable(grid);
  }
  for (const button of document.querySelectorAll("[data-copy]")) {
    button.hidden = false;
    button.addEventListener("click", () => copy(button));
  }
  const contents = document.querySelector("[data-contents]");
  if (contents && matchMedia("(max-width: 70rem)").matches) contents.open = false;
  addEventListener("resize", measure);
  document.addEventListener("toggle", measure, true);
  addEventListener("hashchange", unfold);
  measure();
  if (location.hash) unfold();
})();
