"use strict";
(() => {
  const table = document.getElementById("table");
  const theme = document.getElementById("theme");
  for (const part of document.querySelectorAll(".scripted")) part.hidden = false;

  const root = document.documentElement;
  const prefersDark = matchMedia("(prefers-color-scheme: dark)");
  const isDark = () => (root.dataset.theme || (prefersDark.matches ? "dark" : "light")) === "dark";
  const nameTheme = () => { theme.textContent = isDark() ? "Light view" : "Dark view"; };
  theme.addEventListener("click", () => { root.dataset.theme = isDark() ? "light" : "dark"; nameTheme(); });
  prefersDark.addEventListener("change", nameTheme);
  nameTheme();
  if (!table) return;

  const heads = [...table.tHead.rows[0].cells];
  const filters = [...table.tHead.rows[1].querySelectorAll("input")];
  const bodies = [...table.tBodies];
  const find = document.getElementById("find");
  const count = document.getElementById("count");
  const boxes = [...document.querySelectorAll("#columns input")];
  const points = [...document.querySelectorAll(".point")];
  const bodyOf = new Map(bodies.map((body) => [body.dataset.id, body]));

  const rowOf = (body) => body.rows[0];
  const valueAt = (body, column) => {
    const cell = rowOf(body).cells[column];
    return cell.dataset.v === undefined ? cell.textContent : Number(cell.dataset.v);
  };

  // Sorting: numbers by value, text by letters; equal rows keep their order.
  const compare = (a, b) =>
    typeof a === "number" && typeof b === "number" ? a - b : String(a).localeCompare(String(b), "en", { numeric: true });
  heads.forEach((head, column) => {
    const button = head.querySelector(".sort");
    if (!button) return;
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      for (const other of heads) other.removeAttribute("aria-sort");
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const sign = down ? -1 : 1;
      const sorted = [...table.tBodies].sort((a, b) => sign * compare(valueAt(a, column), valueAt(b, column)));
      table.append(...sorted);
      orderPoints();
    });
  });

  // Filters: a text that is contained, or a bound or range for numbers.
  const number = "[-+\\u2212]?\\d*[.,]?\\d+(?:e[-+]?\\d+)?";
  const bound = new RegExp(`^(<=|>=|<|>|=)\\s*(${number})$`, "i");
  const range = new RegExp(`^(${number})\\s*\\.\\.\\s*(${number})$`, "i");
  const read = (text) => Number(text.replace("\u2212", "-").replace(",", "."));
  const tests = {
    "<": (v, b) => v < b, "<=": (v, b) => v <= b, ">": (v, b) => v > b, ">=": (v, b) => v >= b, "=": (v, b) => v === b,
  };
  const condition = (text) => {
    const wanted = text.trim();
    if (!wanted) return null;
    const limits = bound.exec(wanted);
    if (limits) return (value) => typeof value === "number" && tests[limits[1]](value, read(limits[2]));
    const ends = range.exec(wanted);
    if (ends) return (value) => typeof value === "number" && value >= read(ends[1]) && value <= read(ends[2]);
    if (/^[<>=]/.test(wanted)) return undefined;
    const lower = wanted.toLowerCase();
    return (value, shown) => shown.toLowerCase().includes(lower);
  };
  const applyFilters = () => {
    const conditions = filters.map((input) => {
      const test = condition(input.value);
      input.classList.toggle("wrong", test === undefined);
      input.setAttribute("aria-invalid", String(test === undefined));
      return test;
    });
    const text = find.value.trim().toLowerCase();
    let shown = 0;
    for (const body of bodies) {
      const cells = [...rowOf(body).cells].slice(1);
      const fits =
        (!text || cells.some((cell) => cell.textContent.toLowerCase().includes(text))) &&
        conditions.every((test, k) => !test || test(valueAt(body, k + 1), cells[k].textContent));
      body.hidden = !fits;
      shown += fits;
    }
    for (const point of points) point.classList.toggle("dim", bodyOf.get(point.dataset.id).hidden);
    count.textContent = `${shown} of ${bodies.length} shown`;
    orderPoints();
  };
  for (const input of [find, ...filters]) input.addEventListener("input", applyFilters);
  const clearFilters = () => {
    for (const input of [find, ...filters]) input.value = "";
    applyFilters();
  };
  document.getElementById("reset").addEventListener("click", clearFilters);

  // Columns.
  const showColumn = (column, shown) => {
    for (const row of [...table.tHead.rows, ...bodies.map(rowOf)]) row.cells[column + 1].hidden = !shown;
  };
  const applyColumns = () => {
    boxes.forEach((box, column) => showColumn(column, box.checked));
    const shown = boxes.filter((box) => box.checked).length;
    for (const body of bodies) body.rows[1].cells[0].colSpan = shown + 1;
    table.classList.toggle("many", shown > 18);
    table.classList.toggle("crowded", shown > 30);
  };
  for (const box of boxes) box.addEventListener("change", applyColumns);
  const first = boxes.map((box) => box.defaultChecked);
  const choose = (wanted) => () => { boxes.forEach((box, k) => { box.checked = wanted(k); }); applyColumns(); };
  document.getElementById("all-columns").addEventListener("click", choose(() => true));
  document.getElementById("first-columns").addEventListener("click", choose((k) => first[k]));
  const menu = document.getElementById("columns");
  document.addEventListener("click", (event) => { if (!menu.contains(event.target)) menu.open = false; });
  menu.addEventListener("keydown", (event) => {
    if (event.key === "Escape") { menu.open = false; menu.querySelector("summary").focus(); }
  });

  // Folding.
  const setOpen = (body, open) => {
    body.rows[1].hidden = !open;
    body.querySelector(".unfold").setAttribute("aria-expanded", String(open));
  };
  for (const body of bodies) {
    setOpen(body, false);
    body.querySelector(".unfold").addEventListener("click", () => setOpen(body, body.rows[1].hidden));
    rowOf(body).addEventListener("dblclick", () => setOpen(body, body.rows[1].hidden));
  }
  const openShown = (open) => () => { for (const body of bodies) if (!open || !body.hidden) setOpen(body, open); };
  document.getElementById("open-all").addEventListener("click", openShown(true));
  document.getElementById("close-all").addEventListener("click", openShown(false));

  // Links between plots and table, both ways.
  const mark = (id, on) => {
    const body = bodyOf.get(id);
    rowOf(body).classList.toggle("hot", on);
    for (const point of points) if (point.dataset.id === id) point.classList.toggle("hot", on);
  };
  const unmarkAll = () => { for (const id of bodyOf.keys()) mark(id, false); };
  const goToRow = (id) => {
    const body = bodyOf.get(id);
    if (body.hidden) clearFilters();
    unmarkAll();
    setOpen(body, true);
    rowOf(body).scrollIntoView({ block: "start" });
    rowOf(body).focus({ preventScroll: true });
    mark(id, true);
  };
  for (const point of points) {
    const id = point.dataset.id;
    point.addEventListener("click", (event) => { event.preventDefault(); goToRow(id); });
    point.addEventListener("mouseenter", () => mark(id, true));
    point.addEventListener("mouseleave", () => mark(id, false));
    point.addEventListener("focus", () => mark(id, true));
    point.addEventListener("blur", () => mark(id, false));
  }
  for (const body of bodies) {
    const id = body.dataset.id;
    body.addEventListener("mouseenter", () => mark(id, true));
    body.addEventListener("mouseleave", () => mark(id, false));
    body.querySelector(".to-plot").addEventListener("click", (event) => {
      event.preventDefault();
      const point = points.find((one) => one.dataset.id === id);
      unmarkAll();
      document.getElementById("plot-area").scrollIntoView({ block: "center" });
      point.focus({ preventScroll: true });
      mark(id, true);
    });
  }

  // One stop of the tab key per plot; arrow keys go along the rows' order.
  const plots = [...document.querySelectorAll(".plots figure")].map((figure) => [...figure.querySelectorAll(".point")]);
  let walks = plots;
  const orderPoints = () => {
    const place = new Map([...table.tBodies].map((body, k) => [body.dataset.id, k]));
    walks = plots.map((all) => {
      for (const point of all) point.tabIndex = -1;
      const walk = all
        .filter((point) => !bodyOf.get(point.dataset.id).hidden)
        .sort((a, b) => place.get(a.dataset.id) - place.get(b.dataset.id));
      if (walk.length) walk[0].tabIndex = 0;
      return walk;
    });
  };
  const steps = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 };
  for (const point of points) {
    point.addEventListener("keydown", (event) => {
      const walk = walks.find((one) => one.includes(point));
      const at = walk ? walk.indexOf(point) : -1;
      const ends = { Home: 0, End: walk ? walk.length - 1 : 0 };
      const to = event.key in steps ? at + steps[event.key] : event.key in ends ? ends[event.key] : null;
      if (to === null || at < 0) return;
      event.preventDefault();
      const next = walk[Math.min(Math.max(to, 0), walk.length - 1)];
      point.tabIndex = -1;
      next.tabIndex = 0;
      next.focus();
    });
  }

  applyColumns();
  applyFilters();
  if (location.hash.startsWith("#c-")) {
    const id = decodeURIComponent(location.hash.slice(3));
    if (bodyOf.has(id)) goToRow(id);
  }
})();
