"use strict";
(() => {
  const one = (selector, within = document) => within.querySelector(selector);
  const all = (selector, within = document) => [...within.querySelectorAll(selector)];
  const data = JSON.parse(one("#data").textContent);
  const { marks, scales, states } = data;
  const map = one("#map"), slider = one("#slider"), route = one("#route");
  const [x0, y0, x1, y1] = data.frame;
  const required = new Set(marks.required), back = new Set(marks.back);
  const home = map.getAttribute("viewBox").split(" ").map(Number);
  const plan = states.findIndex(state => state.plan);
  const NONE = 65534, UNDETERMINED = 65535, MOST_CODE = 60000, MOST_NUMBERED = 150, ZOOM = 1.5, MOST_ZOOM = 40;
  let view = [...home], state = states[plan], selected = -1, mm = 1;

  const element = (name, attributes = {}, text = "") => {
    const made = document.createElementNS(map.namespaceURI, name);
    for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
    if (text) made.textContent = text;
    return made;
  };
  const short = (value, digits = 3) => value === 0 ? "0" : value.toFixed(Math.max(0, digits - 1 - Math.floor(Math.log10(Math.abs(value)))));
  const coordinate = value => String(+value.toFixed(3));
  const say = text => { one("#said").textContent = text; };
  const mode = () => one("input[name=view]:checked").value;

  // Rasters: 16-bit numbers to µm, or to shares of the limit; NaN where nothing holds, infinite where not determined.
  function numbers(text, unit) {
    const bytes = Uint8Array.from(atob(text), letter => letter.charCodeAt(0));
    return Float64Array.from(new Uint16Array(bytes.buffer), code =>
      code === NONE ? NaN : code === UNDETERMINED ? Infinity : code * unit);
  }
  function grid(which) {
    const raster = state.raster;
    if (!raster) return null;
    raster.values ??= {};
    if (!raster.values[which]) {
      if (which === "ratio") raster.values.ratio = raster.ratio ? numbers(raster.ratio, scales.ratio.unit) : null;
      else if (which === "worst") {
        const [dx, dy] = [grid("dx"), grid("dy")];
        raster.values.worst = dx.map((value, k) => Math.max(value, dy[k]));
      } else raster.values[which] = numbers(raster[which], scales.um.unit);
    }
    return raster.values[which];
  }
  // Empty raster points beside known ones take their neighbours' mean, so that the shading reaches the outline that cuts it.
  function spread(values, columns, rows) {
    let now = values;
    for (let round = 0; round < 3; round++) {
      const next = now.slice();
      for (let r = 0; r < rows; r++) for (let c = 0; c < columns; c++) {
        const k = r * columns + c;
        if (!Number.isNaN(now[k])) continue;
        let sum = 0, count = 0;
        for (const [down, right] of [[0, 1], [0, -1], [1, 0], [-1, 0], [1, 1], [1, -1], [-1, 1], [-1, -1]]) {
          const i = r + down, j = c + right;
          if (i < 0 || j < 0 || i >= rows || j >= columns || Number.isNaN(now[i * columns + j])) continue;
          sum += now[i * columns + j]; count++;
        }
        if (count) next[k] = sum / count;
      }
      now = next;
    }
    return now;
  }
  // Marching squares: the area with values of at least `level` as one path, and its border inside the raster as another.
  function contour(x, y, values, level) {
    const columns = x.length, area = [], line = [], vertices = [];
    const write = points => points.map(([a, b]) => `${a.toFixed(2)} ${(-b).toFixed(2)}`).join("L");
    for (let r = 0; r + 1 < y.length; r++) {
      let full = -1;
      const close = c => { if (full >= 0) area.push(`M${write([[x[full], y[r]], [x[c], y[r]], [x[c], y[r + 1]], [x[full], y[r + 1]]])}Z`); full = -1; };
      for (let c = 0; c + 1 < columns; c++) {
        const at = [[c, r], [c + 1, r], [c + 1, r + 1], [c, r + 1]], v = at.map(([i, j]) => values[j * columns + i]);
        if (v.some(Number.isNaN) || v.every(value => value < level)) { close(c); continue; }
        if (v.every(value => value >= level)) { if (full < 0) full = c; continue; }
        close(c);
        const points = [], cuts = [];
        for (let k = 0; k < 4; k++) {
          const m = (k + 1) % 4, [i, j] = at[k], [a, b] = at[m];
          if (v[k] >= level) points.push([x[i], y[j]]);
          if ((v[k] >= level) !== (v[m] >= level)) {
            const share = Number.isFinite(v[k]) ? (level - v[k]) / (v[m] - v[k]) : 1;
            const cut = [x[i] + share * (x[a] - x[i]), y[j] + share * (y[b] - y[j])];
            points.push(cut); cuts.push(cut);
          }
        }
        area.push(`M${write(points)}Z`);
        for (let k = 0; k + 1 < cuts.length; k += 2) { line.push(`M${write([cuts[k], cuts[k + 1]])}`); vertices.push(cuts[k]); }
      }
      close(columns - 1);
    }
    return { area: area.join(""), line: line.join(""), vertices };
  }

  function shade() {
    const kind = mode() === "ratio" ? "ratio" : "um", scale = scales[kind], target = one("#shade");
    target.replaceChildren(); one("#limit-names").replaceChildren(); one("#scale").replaceChildren();
    const what = { worst: "k·u of position, worse of dx and dy, µm", dx: "k·u of position in x, µm", dy: "k·u of position in y, µm",
                   ratio: "k·u of position, share of its limit" }[mode()];
    one("#scale-name").textContent = scale ? what : "The position is not determined by these sites.";
    const raw = scale && grid(mode());
    if (!raw) return;
    const { x, y } = state.raster, values = spread(raw, x.length, y.length);
    const layer = element("g", kind === "ratio" ? { "clip-path": "url(#in-limit)" } : {});
    const lines = [], names = [];
    [-Infinity, ...scale.levels].forEach((level, k) => {
      const found = contour(x, y, values, level);
      layer.append(element("path", { d: found.area, fill: scale.colours[k], stroke: scale.colours[k], "stroke-width": 1.2 }));
      if (k) lines.push(element("path", { class: "line", d: found.line }));
    });
    if (kind === "ratio") layer.append(element("path", { d: contour(x, y, values, 1).area, fill: "url(#missed)" }));
    layer.append(...lines);
    for (const limit of scale.limits) {
      const found = contour(x, y, values, limit);
      layer.append(element("path", { class: "halo", d: found.line }), element("path", { class: "limit", d: found.line }));
      const above = values.some(value => value >= limit), name = kind === "ratio" ? "100 %" : `limit ${+limit.toPrecision(6)} µm`;
      names.push(found.vertices.length ? `${name}: heavy line` : above ? `${name}: exceeded everywhere` : `${name}: reached nowhere`);
      if (found.vertices.length) nameLimit(found.vertices, name);
    }
    target.append(layer);
    scale.colours.forEach((colour, k) => {
      const box = document.createElement("div"), swatch = document.createElement("i");
      swatch.style.backgroundColor = colour;
      box.append(swatch);
      if (k) {
        const name = document.createElement("span"), level = scale.levels[k - 1];
        name.textContent = kind === "ratio" ? `${+(100 * level).toPrecision(5)} %` : String(+level.toPrecision(6));
        if (scale.limits.some(limit => Math.abs(limit - level) < 1e-9 * limit)) name.className = "limit";
        box.append(name);
      }
      if (kind === "ratio" && k && scale.levels[k - 1] >= 1 - 1e-9) box.className = "missed";
      one("#scale").append(box);
    });
    if (kind === "ratio") names.push("hatched: missed");
    if (names.length) one("#scale-name").textContent += `; ${names.join(", ")}`;
  }
  function nameLimit(vertices, text) {
    const places = state.rows.map(row => [marks.x[row], marks.y[row]]);
    let best = vertices[0], most = -1;
    for (const [a, b] of vertices) {
      let room = Math.min((a - x0) * 0.4, (x1 - a) * 0.4, b - y0, y1 - b);
      for (const [c, d] of places) room = Math.min(room, Math.hypot((a - c) * 0.4, b - d));
      if (room > most) { most = room; best = [a, b]; }
    }
    one("#limit-names").append(pinned(best, element("text", { y: 4 }, text)));
  }
  // Things that keep their size on the screen: drawn in pixels at a place in mm.
  function pinned([x, y], ...children) {
    const made = element("g", { "data-x": x, "data-y": -y });
    made.append(...children);
    return made;
  }
  function pin() {
    for (const made of all("[data-x]", map)) made.setAttribute("transform", `translate(${made.dataset.x} ${made.dataset.y}) scale(${mm})`);
  }

  const place = row => `x ${coordinate(marks.x[row])}, y ${coordinate(marks.y[row])} mm`;
  // Name, place, and what the loss of a site would cost.
  const parts = k => {
    const row = state.rows[k], notes = [required.has(row) ? "required" : "", back.has(row) ? "on the back" : ""].filter(Boolean);
    return [`Site ${k + 1} of ${state.rows.length}: ${marks.id[row]}`, [place(row), ...notes].join(", "),
      state.loss.length ? `If it is lost: ${state.loss[k]}` : ""];
  };
  const about = k => parts(k).filter(Boolean).join("; ");
  function drawSites() {
    const group = one("#sites");
    group.replaceChildren();
    state.rows.forEach((row, k) => {
      const size = state.rows.length > MOST_NUMBERED ? 3.5 : 5;
      const made = pinned([marks.x[row], marks.y[row]], element("circle", { class: "hit", r: 11 }), element("circle", { class: "ring", r: size + 4.5 }),
        required.has(row) ? element("rect", { class: "body", x: -size, y: -size, width: 2 * size, height: 2 * size })
          : element("circle", { class: "body", r: size }));
      for (const [key, value] of Object.entries({ class: `site-mark${back.has(row) ? " back" : ""}`, role: "button", tabindex: k ? -1 : 0,
        "aria-label": about(k), "aria-pressed": "false", "data-site": k })) made.setAttribute(key, value);
      made.addEventListener("pointerenter", () => detail(k));
      made.addEventListener("pointerleave", () => detail(selected));
      made.addEventListener("focus", () => select(k));
      group.append(made);
    });
    const worst = one("#worst");
    worst.replaceChildren();
    if (state.worst_at) worst.append(pinned(state.worst_at, element("path", { d: "M0 -8L7 5H-7Z" })));
    const legs = state.path && route && route.checked ? "M" + state.path.x.map((x, k) => `${x} ${-state.path.y[k]}`).join("L") : "";
    one("#legs").setAttribute("d", legs); one("#legs-under").setAttribute("d", legs);
  }
  // Numbers beside the sites, the most crowded first; each takes the place that covers least.
  function number() {
    const group = one("#labels"), n = state.rows.length;
    group.replaceChildren();
    const at = state.rows.map(row => [marks.x[row] / mm, -marks.y[row] / mm]), boxes = [];
    const nearest = at.map((a, i) => Math.min(...at.map((b, j) => i === j ? Infinity : Math.hypot(a[0] - b[0], a[1] - b[1])))).sort((a, b) => a - b);
    const size = Math.min(1, Math.max(0.55, nearest[n >> 2] / 11));
    for (const body of all(".body", map)) body.setAttribute("transform", `scale(${size})`);
    if (!n || n > MOST_NUMBERED) return;
    const edges = [x0 / mm, -y1 / mm, x1 / mm, -y0 / mm];
    const crowd = at.map(a => at.filter(b => Math.hypot(a[0] - b[0], a[1] - b[1]) < 30).length);
    for (const k of [...at.keys()].sort((a, b) => crowd[b] - crowd[a] || a - b)) {
      const width = 7 * String(k + 1).length + 1, height = 11;
      let best = null, least = Infinity;
      for (const reach of [6, 11, 17, 24]) for (let step = 0; step < 16; step++) {
        const angle = (step % 2 ? step : step + 0.001) * Math.PI / 8 - Math.PI / 4, c = Math.cos(angle), s = Math.sin(angle);
        const out = reach + Math.abs(c) * width / 2 + Math.abs(s) * height / 2, x = at[k][0] + c * out, y = at[k][1] + s * out;
        let cost = reach;
        for (const beyond of [edges[0] - x + width / 2, edges[1] - y + height / 2, x + width / 2 - edges[2], y + height / 2 - edges[3]]) cost += 3 * Math.max(0, beyond);
        for (const [a, b, w, h, weight] of boxes) cost += weight * Math.max(0, (w + width) / 2 - Math.abs(a - x)) * Math.max(0, (h + height) / 2 - Math.abs(b - y));
        for (const [a, b] of at) cost += 3 * Math.max(0, (12 + width) / 2 - Math.abs(a - x)) * Math.max(0, (12 + height) / 2 - Math.abs(b - y));
        if (cost < least) { least = cost; best = [x, y, reach]; }
        if (cost === 6) break;
      }
      boxes.push([best[0], best[1], width, height, 8]);
      const [dx, dy] = [best[0] - at[k][0], best[1] - at[k][1]], leader = [];
      if (best[2] > 6) leader.push(element("line", { x1: 0, y1: 0, x2: dx * 0.75, y2: dy * 0.75 }));
      group.append(pinned([marks.x[state.rows[k]], marks.y[state.rows[k]]], ...leader,
        element("text", { x: dx, y: dy + 4, "text-anchor": "middle" }, String(k + 1))));
    }
  }
  function drawMarks() {
    one("#candidates").setAttribute("d", data.candidates.map(row => `M${marks.x[row]} ${-marks.y[row]}h0`).join(""));
    one("#candidates").classList.toggle("many", data.candidates.length > 1000);
  }
  function rescale() {
    const box = map.getBoundingClientRect();
    if (!box.width) return;
    map.setAttribute("viewBox", view.map(value => value.toFixed(3)).join(" "));
    mm = Math.max(view[2] / box.width, view[3] / box.height);
    const arm = 2.5 * mm;
    one("#others").setAttribute("d", data.others.x.map((x, k) => `M${x - arm} ${-data.others.y[k] - arm}l${2 * arm} ${2 * arm}m${-2 * arm} 0l${2 * arm} ${-2 * arm}`).join(""));
    axes(box); number(); pin();
  }
  function axes(box) {
    const group = one("#axes"), wide = box.width * mm, high = box.height * mm;
    const left = view[0] + (view[2] - wide) / 2, top = view[1] + (view[3] - high) / 2;
    group.replaceChildren();
    const step = [1, 2, 5, 10, 20, 50, 100, 200, 500, 1000].map(k => k / 10).find(size => size / mm >= 60) ?? 100;
    const tick = (x, y, text, anchor, dx, dy) => group.append(pinned([x, -y], element("text", { x: dx, y: dy, "text-anchor": anchor }, text)));
    const bottom = Math.min(-y0 + 3 * mm, top + high - 16 * mm), side = Math.max(x0 - 3 * mm, left + 34 * mm);
    for (let x = Math.ceil(Math.max(x0, left) / step) * step; x <= Math.min(x1, left + wide); x += step) tick(x, bottom, coordinate(x), "middle", 0, 11);
    for (let y = Math.ceil(Math.max(y0, -top - high) / step) * step; y <= Math.min(y1, -top); y += step) tick(side, -y, coordinate(y), "end", -3, 3.5);
  }

  function detail(k) {
    const box = one("#detail-site");
    const texts = k >= 0 ? parts(k) : ["", "Point at a site, or Tab to it: where it is and what its loss would cost."];
    if (box) [...box.children].forEach((line, i) => { line.textContent = texts[i] ?? ""; });
  }
  function select(k, focus = false) {
    selected = k;
    all(".site-mark", map).forEach((made, i) => {
      made.classList.toggle("on", i === k); made.setAttribute("aria-pressed", String(i === k)); made.setAttribute("tabindex", i === Math.max(k, 0) ? 0 : -1);
      if (i === k && focus) made.focus();
    });
    all("#sites-table tbody tr").forEach((row, i) => row.classList.toggle("on", i === k));
    detail(k);
  }
  function tables() {
    state.limits.forEach((cells, k) => {
      const row = one(`[data-limit="${k}"]`);
      for (const cell of all("[data-cell]", row)) cell.textContent = cells[cell.dataset.cell];
      one("rect", row).setAttribute("width", cells[3]);
      row.className = cells[2] === "met" ? "" : "missed";
    });
    state.terms.forEach(([text, missed], k) => {
      const row = one(`[data-term="${k}"]`);
      one("[data-cell]", row).textContent = text;
      row.className = missed ? "missed" : "";
    });
    for (const [key, [large, below]] of Object.entries(state.answer)) {
      const cell = one(`[data-answer="${key}"]`);
      if (cell) { one("b", cell).textContent = large; one("span", cell).textContent = below; }
    }
    const body = one("#sites-table tbody");
    if (!body) return;
    one("#sites-count").textContent = state.name;
    body.replaceChildren(...state.rows.map((mark, k) => {
      const row = document.createElement("tr");
      [k + 1, "", coordinate(marks.x[mark]), coordinate(marks.y[mark]), ...(back.size ? [back.has(mark) ? "back" : "front"] : []), state.loss[k] ?? ""].forEach((text, column) => {
        const cell = document.createElement(column === 1 ? "th" : "td");
        if (column === 1) {
          cell.scope = "row";
          const button = document.createElement("button");
          button.type = "button"; button.textContent = marks.id[mark];
          button.addEventListener("click", () => { select(k); say(about(k)); });
          cell.append(button);
        } else cell.textContent = text;
        if ([0, 2, 3].includes(column)) cell.className = "n";
        row.append(cell);
      });
      return row;
    }));
  }
  function show(k, aloud) {
    state = states[k];
    if (slider) {
      slider.value = k; slider.setAttribute("aria-valuetext", state.name); one("#slider-says").textContent = state.name;
      const line = one("#here-line"), dot = one("#here"), spot = state.chart;
      line.setAttribute("d", spot ? `M${spot[0]} 16V156` : ""); dot.setAttribute("visibility", spot ? "visible" : "hidden");
      if (spot) { dot.setAttribute("cx", spot[0]); dot.setAttribute("cy", spot[1]); }
    }
    const elsewhere = one("#elsewhere");
    if (elsewhere) elsewhere.hidden = k === plan;
    tables(); shade(); drawSites(); select(-1); rescale();
    if (aloud) say(`${state.answer.proof.join(", ")}. Tightest limit: ${state.answer.tightest.join(", ")}.`);
  }

  // Moving about.
  function look(next) {
    const least = home[2] / MOST_ZOOM, wide = Math.min(Math.max(next[2], least), home[2]), high = wide * home[3] / home[2];
    view = [Math.min(Math.max(next[0], home[0]), home[0] + home[2] - wide), Math.min(Math.max(next[1], home[1]), home[1] + home[3] - high), wide, high];
    rescale();
  }
  function zoom(factor, [x, y] = [view[0] + view[2] / 2, view[1] + view[3] / 2]) {
    const wide = Math.min(Math.max(view[2] / factor, home[2] / MOST_ZOOM), home[2]), share = wide / view[2];
    look([x - (x - view[0]) * share, y - (y - view[1]) * share, wide, 0]);
  }
  const point = event => {
    const at = new DOMPoint(event.clientX, event.clientY).matrixTransform(map.getScreenCTM().inverse());
    return [at.x, at.y];
  };
  one("#closer").addEventListener("click", () => zoom(ZOOM));
  one("#farther").addEventListener("click", () => zoom(1 / ZOOM));
  one("#fit").addEventListener("click", () => look(home));
  map.addEventListener("wheel", event => {
    if (!event.ctrlKey) return;
    event.preventDefault(); zoom(Math.exp(-event.deltaY / 300), point(event));
  }, { passive: false });
  let held = null;
  map.addEventListener("pointerdown", event => {
    const site = event.target.closest(".site-mark");
    if (site) { select(+site.dataset.site, true); event.preventDefault(); return; }
    held = [event.clientX, event.clientY, ...view];
    map.setPointerCapture(event.pointerId); map.classList.add("held");
  });
  map.addEventListener("pointermove", event => {
    if (held) look([held[2] - (event.clientX - held[0]) * mm, held[3] - (event.clientY - held[1]) * mm, view[2], 0]);
    else readPlace(point(event));
  });
  for (const kind of ["pointerup", "pointercancel"]) map.addEventListener(kind, () => { held = null; map.classList.remove("held"); });
  map.addEventListener("pointerleave", () => readPlace(null));
  map.addEventListener("dblclick", event => zoom(ZOOM * ZOOM, point(event)));
  map.addEventListener("keydown", event => {
    const site = event.target.closest(".site-mark"), n = state.rows.length, step = view[2] / 8;
    const go = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
    if (event.ctrlKey || event.altKey || event.metaKey) return;
    if (event.key === "+" || event.key === "=") zoom(ZOOM);
    else if (event.key === "-") zoom(1 / ZOOM);
    else if (event.key === "0") look(home);
    else if (site && go) select((+site.dataset.site + go + n) % n, true);
    else if (site && (event.key === "Home" || event.key === "End")) select(event.key === "Home" ? 0 : n - 1, true);
    else if (site && event.key === "Escape") { select(-1); map.focus(); }
    else if (!site && go) look([view[0] + step * ({ ArrowRight: 1, ArrowLeft: -1 }[event.key] ?? 0), view[1] + step * ({ ArrowDown: 1, ArrowUp: -1 }[event.key] ?? 0), view[2], 0]);
    else return;
    event.preventDefault();
  });
  function readPlace(at) {
    const target = one("#detail-place"), raster = state.raster;
    const hint = "Drag moves the map, Ctrl and the wheel zoom it.";
    if (!at) { target.textContent = hint; return; }
    const [x, y] = [at[0], -at[1]];
    if (x < x0 || x > x1 || y < y0 || y > y1) { target.textContent = hint; return; }
    let near = -1, reach = 9 * mm;
    for (const row of data.candidates) {
      const away = Math.hypot(marks.x[row] - x, marks.y[row] - y);
      if (away < reach) { reach = away; near = row; }
    }
    const told = [`At (${x.toFixed(1)}, ${y.toFixed(1)}) mm`];
    if (raster) {
      const nearest = (values, value) => values.reduce((best, each, k) => Math.abs(each - value) < Math.abs(values[best] - value) ? k : best, 0);
      const k = nearest(raster.y, y) * raster.x.length + nearest(raster.x, x);
      const read = (which, unit, factor) => {
        const value = grid(which)?.[k];
        if (value === undefined || Number.isNaN(value)) return "";
        const most = factor * MOST_CODE * (which === "ratio" ? scales.ratio.unit : scales.um.unit);
        return !Number.isFinite(value) ? "not determined" : value * factor >= 0.999 * most ? `more than ${short(most)}${unit}` : short(factor * value) + unit;
      };
      const [dx, dy, ratio] = [read("dx", " µm", 1), read("dy", " µm", 1), read("ratio", " %", 100)];
      told.push(dx ? `k·u ${dx} in x, ${dy} in y${ratio ? `, ${ratio} of the limit` : ""}` : "outside what the limits look at");
    }
    if (near >= 0 && !state.rows.includes(near)) told.push(`candidate ${marks.id[near]}, not measured`);
    target.textContent = told.join("; ");
  }

  all("input[name=view]").forEach(input => input.addEventListener("change", () => { shade(); pin(); say(one("#scale-name").textContent); }));
  route?.addEventListener("change", () => { drawSites(); select(selected); pin(); });
  slider?.addEventListener("input", () => show(+slider.value, true));
  one("#back")?.addEventListener("click", () => { show(plan, true); slider.focus(); });
  new ResizeObserver(() => rescale()).observe(map);
  for (const made of all(".tools, .legend, .site")) made.hidden = false;
  if (slider) slider.disabled = false;
  drawMarks(); show(plan, false); readPlace(null);
})();
