"use strict";
// The one script of the report: sorts and filters the table, moves the maps, shows what belongs together.
// It never turns text into markup.
(() => {
  const all = (selector, root = document) => [...root.querySelectorAll(selector)];

  const saved = new Date(document.lastModified);
  for (const span of all(".saved")) {
    span.querySelector("time").textContent = saved.toLocaleString(undefined, {dateStyle: "medium", timeStyle: "short"});
    span.hidden = false;
  }

  // ---- maps ----
  const FEET = 0.3048, MILE = 1609.344;
  const roundStep = (value) => {
    const power = 10 ** Math.floor(Math.log10(value));
    return [5, 2, 1].map((m) => m * power).find((step) => step <= value * 1.000001);
  };

  class FieldMap {
    constructor(svg) {
      this.svg = svg;
      this.bar = svg.parentElement.querySelector(".scalebar");
      const [, , width, height] = svg.getAttribute("viewBox").split(" ").map(Number);
      Object.assign(this, {width, height, x: 0, y: 0, w: width, metres: Number(svg.dataset.metres)});
      this.pointers = new Map();
      for (const button of all("[data-zoom]", svg.parentElement)) {
        button.addEventListener("click", () => this.press(button.dataset.zoom));
      }
      svg.addEventListener("keydown", (event) => this.key(event));
      svg.addEventListener("wheel", (event) => this.wheel(event), {passive: false});
      svg.addEventListener("pointerdown", (event) => this.down(event));
      svg.addEventListener("pointermove", (event) => this.move(event));
      for (const end of ["pointerup", "pointercancel"]) svg.addEventListener(end, (event) => this.up(event));
      svg.addEventListener("click", (event) => this.dragged && event.preventDefault(), true);
      new ResizeObserver(() => this.draw()).observe(svg);
    }
    get h() { return this.w * this.height / this.width; }
    get unit() {  // the map's own units for a pixel of the screen
      const box = this.svg.getBoundingClientRect();
      return Math.max(this.w / box.width, this.h / box.height);
    }
    at(event) {
      const box = this.svg.getBoundingClientRect(), unit = this.unit;
      return [this.x + this.w / 2 + (event.clientX - box.left - box.width / 2) * unit,
              this.y + this.h / 2 + (event.clientY - box.top - box.height / 2) * unit];
    }
    press(name) {
      if (name === "all") this.show(0, 0, this.width);
      else this.zoom(name === "in" ? 1.6 : 1 / 1.6, this.x + this.w / 2, this.y + this.h / 2);
    }
    zoom(factor, x, y) {
      const w = Math.min(this.width, Math.max(this.width / 60, this.w / factor)), share = w / this.w;
      this.show(x - (x - this.x) * share, y - (y - this.y) * share, w);
    }
    show(x, y, w) {
      this.w = w;
      this.x = Math.min(Math.max(x, 0), this.width - w);
      this.y = Math.min(Math.max(y, 0), this.height - this.h);
      this.svg.classList.toggle("zoomed", w < this.width);
      this.draw();
    }
    draw() {
      const unit = this.unit;
      if (!Number.isFinite(unit) || unit <= 0) return;
      this.svg.setAttribute("viewBox", `${this.x} ${this.y} ${this.w} ${this.h}`);
      this.svg.style.setProperty("--k", unit);
      const box = this.svg.getBoundingClientRect(), span = this.metres * this.w / this.width;
      const drawn = this.w / unit;  // pixels that the map takes of its box
      const us = this.svg.dataset.system === "us";
      let [name, size] = us ? ["mi", MILE] : ["km", 1000];
      if (0.28 * span < size) [name, size] = us ? ["ft", FEET] : ["m", 1];
      const step = roundStep(0.28 * span / size);
      this.bar.style.width = `${100 * step * size / span * drawn / box.width}%`;
      this.bar.firstElementChild.textContent = `${step.toLocaleString("en")} ${name}`;
    }
    key(event) {
      if (event.target !== this.svg || event.ctrlKey || event.metaKey || event.altKey) return;
      const step = this.w / 8;
      const moves = {ArrowLeft: [-step, 0], ArrowRight: [step, 0], ArrowUp: [0, -step], ArrowDown: [0, step]};
      if (event.key in moves) this.show(this.x + moves[event.key][0], this.y + moves[event.key][1], this.w);
      else if (event.key === "+" || event.key === "=") this.press("in");
      else if (event.key === "-") this.press("out");
      else if (event.key === "0") this.press("all");
      else return;
      event.preventDefault();
    }
    wheel(event) {
      if (!event.ctrlKey && document.activeElement !== this.svg) return;  // the page scrolls on
      event.preventDefault();
      this.zoom(Math.exp(-event.deltaY / 400), ...this.at(event));
    }
    down(event) {
      this.dragged = false;
      this.pointers.set(event.pointerId, event);
    }
    move(event) {
      const before = this.pointers.get(event.pointerId);
      if (!before) return;
      const unit = this.unit, dx = event.clientX - before.clientX, dy = event.clientY - before.clientY;
      if (this.pointers.size === 1) {
        if (!this.dragged && Math.hypot(dx, dy) < 5) return;
        if (!this.dragged) this.svg.setPointerCapture(event.pointerId);
        this.show(this.x - dx * unit, this.y - dy * unit, this.w);
      } else {
        const other = [...this.pointers.values()].find((entry) => entry.pointerId !== event.pointerId);
        const was = Math.hypot(before.clientX - other.clientX, before.clientY - other.clientY);
        const now = Math.hypot(event.clientX - other.clientX, event.clientY - other.clientY);
        if (was > 0) this.zoom(now / was, ...this.at(other));
      }
      this.dragged = true;
      this.svg.classList.add("moving");
      this.pointers.set(event.pointerId, event);
    }
    up(event) {
      this.pointers.delete(event.pointerId);
      this.svg.classList.remove("moving");
    }
  }
  for (const svg of all("svg.map")) new FieldMap(svg);

  // ---- what belongs to one outlet, on the index ----
  const map = document.querySelector(".mapbox.index svg.map");
  const parts = new Map();  // outlet -> everything that shows it
  for (const element of all("[data-o]")) {
    const key = element.dataset.o;
    if (!parts.has(key)) parts.set(key, []);
    parts.get(key).push(element);
  }
  const above = new Map(all(".basin[data-up]").map((basin) => [basin.dataset.o, basin.dataset.up.split(" ")]));
  let lit = [];
  const light = (key) => {
    for (const element of lit) element.classList.remove("lit");
    lit = key === undefined ? [] : parts.get(key).slice();
    const queue = key === undefined ? [] : [...(above.get(key) ?? [])];
    for (let i = 0; i < queue.length; i++) {  // the whole basin: every piece upstream
      lit.push(...parts.get(queue[i]).filter((element) => element.classList.contains("basin")));
      queue.push(...(above.get(queue[i]) ?? []));
    }
    for (const element of lit) element.classList.add("lit");
    map?.classList.toggle("picking", key !== undefined);
  };
  const keyOf = (event) => event.target.closest?.("[data-o]")?.dataset.o;
  for (const root of [map, document.querySelector("#table tbody"), document.querySelector(".worries")]) {
    if (!root) continue;
    for (const name of ["pointerover", "focusin"]) root.addEventListener(name, (event) => light(keyOf(event)));
    for (const name of ["pointerleave", "focusout"]) root.addEventListener(name, () => light(undefined));
  }

  // ---- the table ----
  const table = document.getElementById("table");
  if (!table) return;
  const body = table.tBodies[0], rows = [...body.rows];
  const values = new Map(rows.map((row) => [row, [...row.cells].map((cell) => cell.dataset.v)]));
  const texts = new Map(rows.map((row) => [row, row.textContent.toLowerCase()]));
  const headings = all("thead th", table), filters = all(".filters input", table);
  const find = document.getElementById("find"), flag = document.getElementById("flag");
  const collator = new Intl.Collator("en", {numeric: true});

  headings.forEach((heading, column) => heading.firstElementChild.addEventListener("click", () => {
    const down = heading.getAttribute("aria-sort") === "ascending";
    for (const other of headings) other.setAttribute("aria-sort", "none");
    heading.setAttribute("aria-sort", down ? "descending" : "ascending");
    const numeric = filters[column].dataset.number === "1" || column === 2;
    const sign = down ? -1 : 1;
    const sorted = rows.slice().sort((a, b) => {
      const [x, y] = [values.get(a)[column], values.get(b)[column]];
      if (x === "" || y === "") return (x === "") - (y === "");  // what is missing comes last, either way
      return sign * (numeric ? x - y : collator.compare(x, y));
    });
    body.append(...sorted);
  }));

  const tester = (input, column) => {
    const wanted = input.value.trim().toLowerCase();
    input.removeAttribute("aria-invalid");
    if (!wanted) return null;
    if (input.dataset.number !== "1") {
      return (row) => values.get(row)[column].toLowerCase().includes(wanted)
        || row.cells[column].textContent.toLowerCase().includes(wanted);
    }
    const number = "(-?[\\d,]*\\.?\\d+)";
    const one = wanted.match(new RegExp(`^(>=|<=|>|<|=)\\s*${number}$`));
    const two = wanted.match(new RegExp(`^${number}\\s*(?:-|–|to|\\.\\.)\\s*${number}$`));
    const plain = (text) => Number(text.replaceAll(",", ""));
    if (two) return (row) => compare(row, column, (v) => v >= plain(two[1]) && v <= plain(two[2]));
    if (one) {
      const limit = plain(one[2]);
      const holds = {">": (v) => v > limit, "<": (v) => v < limit, ">=": (v) => v >= limit, "<=": (v) => v <= limit,
                     "=": (v) => Math.abs(v - limit) <= 0.005 * Math.abs(limit)}[one[1]];
      return (row) => compare(row, column, holds);
    }
    return (row) => row.cells[column].textContent.toLowerCase().includes(wanted);
  };
  const compare = (row, column, holds) => values.get(row)[column] !== "" && holds(Number(values.get(row)[column]));

  const apply = () => {
    const tests = filters.map(tester).filter(Boolean);
    const wanted = find.value.trim().toLowerCase(), key = flag.value;
    if (wanted) tests.push((row) => texts.get(row).includes(wanted));
    if (key) tests.push((row) => values.get(row).at(-1).split(" ").includes(key));
    let shown = 0;
    for (const row of rows) {
      const fits = tests.every((test) => test(row));
      row.hidden = !fits;
      shown += fits;
      for (const element of parts.get(row.dataset.o)) {
        if (element.classList.contains("outlet")) element.classList.toggle("off", !fits);
      }
    }
    document.getElementById("shown").textContent = `${shown} of ${rows.length} shown`;
  };
  for (const input of [...filters, find, flag]) input.addEventListener("input", apply);
  document.getElementById("clear").addEventListener("click", () => {
    for (const input of [...filters, find, flag]) input.value = "";
    apply();
  });
  for (const button of all(".pick")) button.addEventListener("click", () => {
    flag.value = button.dataset.flag;
    apply();
    document.getElementById("outlets").scrollIntoView();
  });
})();
