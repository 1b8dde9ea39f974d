"use strict";
(() => {
  const about = JSON.parse(document.getElementById("about").textContent);
  const token = new URLSearchParams(location.search).get("token") || "";
  const $ = (id) => document.getElementById(id);
  const SVG = "http://www.w3.org/2000/svg";
  const SHAPES = {
    failed: ["M-5-5 5 5M5-5-5 5", "none"], serious: ["M0-7 7 0 0 7-7 0Z", "#a3123a"],
    warning: ["M0-6.5 6.5 5H-6.5Z", "#b8670a"], note: ["M-4.5-4.5H4.5V4.5H-4.5Z", "#3f6788"],
    ok: ["M-5 0A5 5 0 1 1 5 0A5 5 0 1 1-5 0Z", "#ffffff"],
  };
  const DONE = ["accepted", "edited", "rejected", "field_check"];
  let queue = [], current = null, revision = 0, unsaved = 0, dragging = null, placing = false;

  function el(tag, attributes = {}, ...children) {
    const node = document.createElement(tag);
    for (const [key, value] of Object.entries(attributes)) {
      if (key.startsWith("on")) node.addEventListener(key.slice(2), value);
      else if (value === true) node.setAttribute(key, "");
      else if (value !== false && value != null) node.setAttribute(key, value);
    }
    node.append(...children.filter((child) => child != null));
    return node;
  }
  function svg(tag, attributes = {}, ...children) {
    const node = document.createElementNS(SVG, tag);
    for (const [key, value] of Object.entries(attributes)) node.setAttribute(key, value);
    node.append(...children);
    return node;
  }
  const picture = (text) => {
    // Only pictures that this program drew and escaped come here.
    const holder = document.createElement("div");
    holder.innerHTML = text || "";
    return holder.firstElementChild;
  };
  const mark = (severity) => svg("svg", { viewBox: "-8 -8 16 16", "aria-hidden": "true" },
    svg("path", { d: SHAPES[severity][0], fill: SHAPES[severity][1], stroke: "#1d2733", "stroke-width": 1.4 }));

  let timer = 0;
  function tell(text, bad = false) {
    const told = $("told");
    told.textContent = text;
    told.className = bad ? "bad" : "";
    told.hidden = !text;
    clearTimeout(timer);
    if (!bad) timer = setTimeout(() => { told.hidden = true; }, 4000);
  }

  async function ask(path, body) {
    const options = { headers: { "X-Review-Token": token } };
    if (body) {
      options.method = "POST";
      options.body = JSON.stringify(body);
    }
    let response;
    try {
      response = await fetch(path, options);
    } catch {
      tell("basinwright review has stopped. Start it again: every finished step is kept.", true);
      return null;
    }
    if (response.status === 403) {
      tell("Refused: open the address that basinwright review printed.", true);
      return null;
    }
    const answer = await response.json();
    if (!path.endsWith("/try")) {
      revision = answer.revision;
      unsaved = answer.unsaved;
      $("undo").disabled = !answer.undo;
      $("redo").disabled = !answer.redo;
      $("save").disabled = !unsaved;
      $("discard").hidden = !unsaved;
      progress();
    }
    if (answer.problems) {
      tell(answer.problems.join("\n"), true);
      return null;
    }
    return answer;
  }

  function progress() {
    const done = queue.filter((entry) => DONE.includes(entry.state)).length;
    const count = (state) => queue.filter((entry) => entry.state === state).length;
    const parts = [`${done} of ${queue.length} outlets reviewed`];
    for (const [state, words] of [["edited", "edited"], ["rejected", "rejected"], ["field_check", "to check in the field"]])
      if (count(state)) parts.push(`${count(state)} ${words}`);
    parts.push(unsaved ? `${unsaved} step${unsaved > 1 ? "s" : ""} not saved` : "all saved");
    $("progress").textContent = parts.join(" · ");
    document.title = `${unsaved ? "* " : ""}Review: ${about.run}`;
  }

  async function list() {
    const answer = await ask("/api/queue");
    if (!answer) return;
    queue = answer.outlets;
    draw();
    progress();
  }
  function draw() {
    const wanted = $("find").value.trim().toLowerCase(), which = $("which").value;
    const shown = queue.filter((entry) =>
      (entry.id + " " + entry.name + " " + entry.flags.join(" ")).toLowerCase().includes(wanted)
      && (!which || (which === "left") === (entry.state === "left")));
    $("queue").replaceChildren(...shown.map((entry) => el("li", {}, el("button",
      { type: "button", "data-id": entry.id, "aria-current": String(current !== null && entry.id === current.id),
        title: entry.flags.join(" "), onclick: () => open(entry.id) },
      mark(entry.severity),
      el("span", {}, el("b", {}, entry.id + (entry.name ? " · " + entry.name : "")),
        el("small", {}, entry.state === "left"
          ? (entry.severity === "ok" ? "no doubt" : entry.severity) + (entry.outlets_above ? `, ${entry.outlets_above} outlets above` : "")
          : el("span", { class: "state " + entry.state }, about.states[entry.state])))))));
  }

  async function open(id) {
    const answer = await ask("/api/outlet?id=" + encodeURIComponent(id));
    if (!answer) return;
    show(answer.outlet);
    draw();
    $("main").scrollTop = 0;
  }

  function show(outlet, keepMap = false) {
    const map = keepMap ? $("map") : null;
    current = keepMap ? { ...current, ...outlet } : outlet;
    placing = false;
    const main = $("main");
    const where = main.scrollTop;
    main.replaceChildren(heading(), doubts(), decide());
    if (!current.failed) {
      main.append(
        figures(),
        el("p", { class: "hint" }, "Drag an orange handle on the profile (or focus it and press the arrow keys) to move where sheet flow ends or where the channel begins. Point at the profile or the map to see the same place on the other."),
        el("div", { class: "side" },
          el("div", {}, map || mapbox(), legend()),
          el("div", { id: "charts" }, el("figure", { id: "profile" }, picture(current.profile)), el("figure", { id: "floods" }, picture(current.floods) || ""))),
        tables());
      handles();
      link();
    }
    main.scrollTop = where;
    const entry = queue.find((each) => each.id === current.id);
    if (entry) { entry.state = current.mark.state; draw(); progress(); }
  }
  const heading = () => el("h2", { id: "heading" }, current.heading);
  function doubts() {
    const item = (doubt) => el("li", { class: doubt.severity }, el("p", {}, el("b", {}, doubt.key + " "), doubt.message),
      el("p", { class: "remedy" }, doubt.remedy));
    const notes = current.doubts.filter((doubt) => doubt.severity === "note");
    const grave = current.doubts.filter((doubt) => doubt.severity !== "note");
    return el("div", {}, el("ul", { class: "doubts" }, ...grave.map(item)), notes.length
      ? el("details", {}, el("summary", {}, notes.length === 1 ? "1 note" : `${notes.length} notes`), el("ul", { class: "doubts" }, ...notes.map(item)))
      : null);
  }

  function decide() {
    const reason = el("input", { id: "reason", maxlength: 500, placeholder: "reason, for the log", "aria-label": "Reason" });
    const button = (state, words) => el("button", { type: "button", "data-mark": state,
      "aria-pressed": String(current.mark.state === state),
      onclick: () => act({ kind: "mark", value: state, reason: reason.value }) }, words);
    return el("div", { class: "decide" },
      el("span", { class: "now" }, about.states[current.mark.state] + (current.mark.reason ? `: ${current.mark.reason}` : "")),
      reason, button("accepted", "Accept"), button("rejected", "Reject"), button("field_check", "Check in the field"),
      current.failed ? null : el("button", { type: "button", id: "first", onclick: () => act({ kind: "first", reason: reason.value }) }, "Drop this outlet's edits"));
  }
  const mapbox = () => el("div", { id: "map" }, picture(current.map) || el("p", { class: "hint" }, "This run keeps no map."));
  const legend = () => el("p", { class: "hint" }, "Sheet flow is yellow and dotted, shallow flow red and dashed, the channel blue.");
  function figures() {
    const row = (words, key) => el("tr", {}, el("th", { scope: "row" }, words), ...current.figures.map((each) =>
      el("td", { "data-stem": each.stem, "data-row": key, class: key === "now" && each.change ? "moved" : null }, each[key])));
    return el("div", { class: "figures scroll", id: "figures" }, el("table", { class: "data" },
      el("thead", {}, el("tr", {}, el("td"), ...current.figures.map((each) => el("th", { scope: "col" }, each.label)))),
      el("tbody", {}, row("first computed", "before"), row("now", "now"), row("change", "change"))));
  }

  const TITLES = { segments: "Segments", cover_shares: "Land cover and curve numbers", outlets: "The basin" };
  const REMARKS = {
    segments: "A cell that you fill stands until you empty it; an empty one is computed.",
    cover_shares: "The curve number is that of antecedent runoff condition II.",
    outlets: "A curve number or time of concentration that you fill replaces the computed one.",
  };
  function tables() {
    return el("div", {}, stage(), ...Object.entries(current.tables).map(([name, table]) => el("section", {},
      el("h3", {}, TITLES[name]), el("p", { class: "hint" }, REMARKS[name]),
      el("div", { class: "scroll" }, el("table", { class: "data edit", "data-table": name },
        el("thead", {}, el("tr", {}, ...table.columns.map((column) => el("th", { scope: "col", title: column.meaning },
          column.stem.replaceAll("_", " "), column.unit && column.unit !== "1" ? el("small", {}, column.unit) : null)))),
        el("tbody", {}, ...table.rows.map((row, place) => el("tr", { class: table.edited[place] ? "edited" : null },
          ...row.map((cell, at) => el("td", { class: (table.columns[at].type === "number" ? "n" : "") + (table.columns[at].stem === "note" ? " wide" : "") },
            field(name, place, table.columns[at], cell)))))))))));
  }
  function field(table, place, column, cell) {
    if (!column.editable) return cell.text;
    const change = (event) => act({ kind: "cell", table, row: place, column: column.stem, value: event.target.value });
    const label = `${column.stem} of row ${place + 1}`;
    if (column.choices.length)
      return el("select", { "aria-label": label, onchange: change }, ...column.choices.map((choice) =>
        el("option", { value: choice, selected: choice === cell.exact }, choice)));
    const shown = cell.held || !cell.exact ? cell.exact : cell.text;
    return el("input", { value: shown, placeholder: cell.text, "aria-label": label, class: cell.held ? "held" : null, onchange: change });
  }
  const stage = () => el("p", { class: "controls" }, "Channels flow at ",
    ...[["bankfull", "bankfull depth"], ["half", "half of it"]].map(([value, words]) =>
      el("button", { type: "button", "data-stage": value, onclick: () => act({ kind: "stage", value, reason: $("reason").value }) }, words)));

  async function act(action) {
    action.reason = action.reason || $("reason").value;
    const answer = await ask("/api/do", { ...action, id: current.id, revision });
    if (answer) show({ ...current, ...answer.outlet });
    else if (action.kind !== "mark") await open(current.id);
  }

  /* The joints of the path, and the place that profile and map share. */
  const xOf = (distance) => current.scale.left + distance / current.scale.length * (current.scale.right - current.scale.left);
  const distanceOf = (x) => (x - current.scale.left) / (current.scale.right - current.scale.left) * current.scale.length;
  const chart = () => document.querySelector("#profile svg");
  function pointer(event) {
    const drawing = chart(), at = new DOMPoint(event.clientX, event.clientY).matrixTransform(drawing.getScreenCTM().inverse());
    return distanceOf(at.x);
  }
  const number = (value) => Math.round(value).toLocaleString("en-US");
  const NAMES = { sheet_end: "sheet flow ends", channel_start: "channel begins" };
  function handles() {
    const drawing = chart();
    if (!drawing) return;
    for (const joint of current.joints) {
      const at = dragging && dragging.which === joint.which ? dragging.at : joint.at;
      const group = svg("g", { class: "handle", tabindex: 0, role: "slider", "data-joint": joint.which,
        "aria-label": `${NAMES[joint.which]}, distance from the divide`, "aria-valuemin": joint.low, "aria-valuemax": joint.high,
        "aria-valuenow": at, "aria-valuetext": `${number(at)} ${current.unit}` },
        svg("rect", { class: "grip", x: -12, y: 24, width: 24, height: 214 }), svg("line", { y1: 30, y2: 232 }),
        svg("rect", { x: -5, y: joint.which === "sheet_end" ? 36 : 204, width: 10, height: 22, rx: 3 }), svg("text", { y: 226, x: 10 }, ""));
      group.setAttribute("transform", `translate(${xOf(at)} 0)`);
      group.addEventListener("pointerdown", (event) => {
        event.preventDefault();
        group.setPointerCapture(event.pointerId);
        dragging = { which: joint.which, at: joint.at, joint, changed: false };
      });
      group.addEventListener("pointermove", (event) => {
        if (!dragging || dragging.which !== joint.which) return;
        dragging.at = Math.min(Math.max(pointer(event), joint.low), joint.high);
        dragging.changed = true;
        place(group);
        preview();
      });
      const drop = () => {
        if (!dragging || dragging.which !== joint.which) return;
        const { at, changed } = dragging;
        dragging = null;
        if (changed) act({ kind: "joint", which: joint.which, at });
      };
      group.addEventListener("pointerup", drop);
      group.addEventListener("pointercancel", () => { dragging = null; open(current.id); });
      group.addEventListener("keydown", (event) => {
        const step = { ArrowLeft: -1, ArrowRight: 1, PageDown: -10, PageUp: 10 }[event.key];
        if (!step) return;
        event.preventDefault();
        const to = Math.min(Math.max(joint.at + step * current.scale.length / 200, joint.low), joint.high);
        act({ kind: "joint", which: joint.which, at: to }).then(() => document.querySelector(`[data-joint=${joint.which}]`)?.focus());
      });
      drawing.append(group);
      if (dragging && dragging.which === joint.which) place(group);
    }
  }
  function place(group) {
    group.setAttribute("transform", `translate(${xOf(dragging.at)} 0)`);
    const words = group.querySelector("text");
    words.textContent = `${number(dragging.at)} ${current.unit}`;
    const late = dragging.at > 0.7 * current.scale.length;
    words.setAttribute("x", late ? -10 : 10);
    words.setAttribute("text-anchor", late ? "end" : "start");
    here(dragging.at);
  }
  let asking = false;
  async function preview() {
    if (asking) return;
    asking = true;
    while (dragging && dragging.asked !== dragging.at) {
      const at = dragging.at;
      dragging.asked = at;
      const answer = await ask("/api/try", { id: current.id, kind: "joint", which: dragging.which, at });
      if (!answer || !dragging) break;
      current.figures = answer.outlet.figures;
      $("figures").replaceWith(figures());
      const floods = picture(answer.outlet.floods);
      if (floods) $("floods").replaceChildren(floods);
    }
    asking = false;
  }

  const marks = () => ({ map: document.querySelector("#map svg.map .here"), line: document.querySelector("#profile .at") });
  function here(distance) {
    const { map, line } = marks();
    if (line) { line.setAttribute("x1", xOf(distance)); line.setAttribute("x2", xOf(distance)); line.style.display = ""; }
    if (!map || !current.path.length) return;
    const path = current.path;
    let low = 0, high = path.length - 1;
    while (high - low > 1) { const middle = (low + high) >> 1; if (path[middle][0] <= distance) low = middle; else high = middle; }
    const [a, b] = [path[low], path[high]], share = b[0] > a[0] ? Math.min(Math.max((distance - a[0]) / (b[0] - a[0]), 0), 1) : 0;
    map.setAttribute("cx", a[1] + (b[1] - a[1]) * share);
    map.setAttribute("cy", a[2] + (b[2] - a[2]) * share);
    map.style.display = "";
  }
  function away() { const { map, line } = marks(); for (const node of [map, line]) if (node) node.style.display = "none"; }
  function link() {
    const drawing = chart(), map = document.querySelector("#map svg.map");
    if (!drawing) return;
    drawing.append(svg("line", { class: "at", y1: 30, y2: 352, style: "display:none" }));
    drawing.addEventListener("pointermove", (event) => {
      if (dragging) return;
      const distance = pointer(event);
      if (distance >= 0 && distance <= current.scale.length) here(distance); else away();
    });
    drawing.addEventListener("pointerleave", () => { if (!dragging) away(); });
    if (!map) return;
    map.querySelector(".here")?.remove();
    const wide = map.viewBox.baseVal.width;
    map.append(svg("circle", { class: "here", r: wide / 90, style: "display:none", "vector-effect": "non-scaling-stroke" }));
    if (map.dataset.linked) return;
    map.dataset.linked = "yes";
    map.addEventListener("pointermove", (event) => {
      if (!current.path.length) return;
      const at = new DOMPoint(event.clientX, event.clientY).matrixTransform(map.getScreenCTM().inverse());
      let best = null, least = Infinity;
      for (const point of current.path) { const d = (point[1] - at.x) ** 2 + (point[2] - at.y) ** 2; if (d < least) { least = d; best = point; } }
      if (best && least < (wide / 12) ** 2) here(best[0]); else away();
    });
    map.addEventListener("pointerleave", away);
  }

  for (const verb of ["undo", "redo", "save", "discard"])
    $(verb).addEventListener("click", async () => {
      if (verb === "discard" && !confirm("Give up everything that is not saved?")) return;
      document.body.classList.toggle("busy", verb === "save");
      const answer = await ask("/api/" + verb, { id: current ? current.id : (queue[0] || {}).id });
      document.body.classList.remove("busy");
      if (!answer) return;
      show(answer.outlet);
      if (verb === "save") tell("Saved. The tables, hydrographs and report of the run follow from your corrections.");
      await list();
    });
  addEventListener("keydown", (event) => {
    if (!(event.ctrlKey || event.metaKey) || event.target.matches("input")) return;
    const verb = { z: event.shiftKey ? "redo" : "undo", y: "redo", s: "save" }[event.key.toLowerCase()];
    if (!verb) return;
    event.preventDefault();
    $(verb).click();
  });
  addEventListener("beforeunload", (event) => { if (unsaved) event.preventDefault(); });
  for (const id of ["find", "which"]) $(id).addEventListener("input", draw);
  $("run").textContent = about.run;
  if (about.resumed) tell(`Taken up again: ${about.resumed} steps that were not saved.`);
  list().then(() => { if (queue.length) open(queue[0].id); });
})();
