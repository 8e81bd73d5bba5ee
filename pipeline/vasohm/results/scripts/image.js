"use strict";
// The picture of one image, to explore and to correct. All text goes in as text, never as markup.
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const get = (id) => document.getElementById(id);
  const segments = data.segments, n = segments.id.length;
  if (typeof Bokeh === "undefined" || !n) return; // the page stays as it is without scripts
  get("explore").hidden = false;
  get("plain").hidden = true;
  const REACH = 9; // screen pixels within which a pointer takes a segment
  const ROWS = 100; // of the table at a time
  const PLACES = ["crossing", "branching"], FATES = ["drop", "keep"];
  const state = { colouring: data.colour, chosen: -1, place: -1, from: 0, sort: "share", down: true, saved: true };
  if (segments.share.every((one) => one === null)) state.sort = "length";
  const edits = data.edits.map((edit) => ({ ...edit, former: true }));
  const facts = new Set(data.facts);

  // Words and numbers
  const make = (tag, text = "", props = {}) => Object.assign(document.createElement(tag), { textContent: text }, props);
  const raised = (text) => [...text].map((c) => (c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[c])).join("");
  function shown(value, digits = 3) {
    if (value === null || value === undefined) return "";
    const size = Math.abs(value);
    if (size === 0) return "0";
    if (size >= 1e-3 && size < 1e6) return value.toFixed(Math.max(0, digits - 1 - Math.floor(Math.log10(size))));
    const [mantissa, power] = value.toExponential(digits - 1).split("e");
    return `${mantissa} × 10${raised(power.replace("+", ""))}`;
  }
  const doubts = (i) => segments.flags[i].split(";").filter((flag) => flag && !facts.has(flag));
  const flagKind = (i) => (segments.doubtful[i] ? "doubtful" : doubts(i).length ? "other" : "sound");
  const percent = (i) => (segments.share[i] === null ? "" : `${shown(100 * segments.share[i])} %`);
  const withSe = (i) => shown(segments.radius[i]) + (segments.radiusSe[i] === null ? "" : ` ± ${shown(segments.radiusSe[i], 2)}`);
  function resistance(i) {
    if (segments.resistance[i] === null) return "";
    return `${shown(segments.resistance[i])} (${shown(segments.resistanceLo[i])} to ${shown(segments.resistanceHi[i])})`;
  }
  const editOf = (i, kinds) => edits.find((edit) => edit.segment === i && kinds.includes(edit.edit));
  const classOf = (i) => editOf(i, ["class"])?.value ?? segments.vesselClass[i];
  const facts_of = (i) => [
    ["Network", String(segments.network[i])],
    ["Class", classOf(i) || "not said"],
    ["Length", `${shown(segments.length[i])} µm`],
    ["Hydraulic radius", segments.radius[i] === null ? "not known" : `${withSe(i)} µm`],
    ["Viscosity", segments.viscosity[i] === null ? "not known" : `${shown(segments.viscosity[i])} mPa·s`],
    ["Resistance, 95 % interval", resistance(i) ? `${resistance(i)} Pa·s/m³` : "not known"],
    ["Share of the network's resistance", percent(i) || "none: the network has no resistance"],
    ["Flags", doubts(i).join(", ") || "none"],
  ];

  // Colours
  const CATEGORIES = {
    class: () => [...Object.entries(data.classColours), ["", data.grey]].map(([key, colour]) => ({
      key, colour, label: key || "not said", has: (i) => classOf(i) === key })),
    flags: () => [["sound", "no doubt"], ["doubtful", "doubtful radius (rim, unresolved, inferred)"], ["other", "another flag"]].map(
      ([key, label]) => ({ key, colour: data.flagColours[key], label, has: (i) => flagKind(i) === key })),
  };
  const categories = () => CATEGORIES[state.colouring]?.();
  function colourOf(i) {
    const kinds = categories();
    if (kinds) return (kinds.find((kind) => kind.has(i)) ?? { colour: data.grey }).colour;
    const by = data.colourings[state.colouring], value = by.values[i];
    if (!(value > 0) || by.low === undefined) return data.grey;
    const share = by.logarithmic ? Math.log(value / by.low) / Math.log(by.high / by.low) : (value - by.low) / (by.high - by.low);
    return data.palette[Math.round(Math.min(1, Math.max(0, share)) * (data.palette.length - 1))];
  }
  const opacityOf = (i) => (editOf(i, ["drop"]) ? 0.1 : segments.doubtful[i] && state.colouring !== "share" && !categories() ? 0.45 : 0.8);

  // The picture
  function outline(line) {
    const left = [], right = [], last = line.length / 3 - 1;
    for (let k = 0; k <= last; k++) {
      const a = 3 * Math.max(k - 1, 0), b = 3 * Math.min(k + 1, last), at = 3 * k;
      const dx = line[b] - line[a], dy = line[b + 1] - line[a + 1], size = Math.hypot(dx, dy) || 1;
      const r = Math.max(line[at + 2], 4) / size; // never thinner than is seen
      left.push([(line[at] - dy * r) / 10, (line[at + 1] + dx * r) / 10]);
      right.push([(line[at] + dy * r) / 10, (line[at + 1] - dx * r) / 10]);
    }
    return left.concat(right.reverse());
  }
  const outlines = data.lines.map(outline);
  const xs = outlines.map((o) => o.map((p) => p[0])), ys = outlines.map((o) => o.map((p) => p[1]));
  const all = Array.from({ length: n }, (_, i) => i);
  const source = (columns) => new Bokeh.ColumnDataSource({ data: columns });
  const painted = () => ({ xs, ys, colour: all.map(colourOf), opacity: all.map(opacityOf) });
  const drawn = source(painted()), around = source({ xs: [], ys: [] }), under = source({ xs: [], ys: [] });
  const inside = data.stubs.map((stub) => [0, 1].map((k) => [0, 2, 4, 6].map((c) => stub[1 + k + c] / 10))); // of a wider vessel
  const stubs = () => ({ xs: inside.map((o) => o[0]), ys: inside.map((o) => o[1]), colour: data.stubs.map((stub) => colourOf(stub[0])), opacity: data.stubs.map((stub) => 0.75 * opacityOf(stub[0])) });
  const pieces = source(stubs());
  const rings = source({ x: [], y: [] }), marks = source({ x: [], y: [] });
  const whole = { x: [-0.5, data.width - 0.5], y: [data.height - 0.5, -0.5] };
  const figure = Bokeh.Plotting.figure({
    x_range: new Bokeh.Range1d({ start: whole.x[0], end: whole.x[1] }),
    y_range: new Bokeh.Range1d({ start: whole.y[0], end: whole.y[1] }),
    tools: "pan,wheel_zoom", active_scroll: "wheel_zoom", toolbar_location: null, min_border: 0, outline_line_color: null,
    sizing_mode: "scale_width", aspect_ratio: data.width / data.height, x_axis_type: null, y_axis_type: null,
    background_fill_color: "#000000",
  });
  figure.xgrid.visible = figure.ygrid.visible = false;
  figure.image_url({ url: { value: data.picture }, x: whole.x[0], y: whole.y[1], w: data.width, h: data.height, anchor: "top_left" });
  const field = (name) => ({ field: name });
  figure.patches(field("xs"), field("ys"), { source: pieces, fill_color: field("colour"), fill_alpha: field("opacity"), line_color: null });
  figure.patches(field("xs"), field("ys"), { source: drawn, fill_color: field("colour"), fill_alpha: field("opacity"), line_color: field("colour"), line_alpha: field("opacity"), line_width: 0.7 });
  const lines = { fill_alpha: 0, line_join: "round" };
  figure.patches(field("xs"), field("ys"), { source: under, ...lines, line_color: "#ffffff", line_width: 2 });
  figure.patches(field("xs"), field("ys"), { source: around, ...lines, line_color: "#ffffff", line_width: 5 });
  figure.patches(field("xs"), field("ys"), { source: around, ...lines, line_color: "#000000", line_width: 1.8 });
  figure.scatter(field("x"), field("y"), { source: rings, marker: "circle", size: 9, fill_alpha: 0, line_color: "#ffffff", line_width: 1.5 });
  figure.scatter(field("x"), field("y"), { source: marks, marker: "x", size: 13, line_color: "#000000", line_width: 6 });
  figure.scatter(field("x"), field("y"), { source: marks, marker: "x", size: 13, line_color: "#ffffff", line_width: 3 });
  get("view").style.maxWidth = `calc(80vh * ${data.width / data.height})`;
  const perScreenPx = () => (figure.x_range.end - figure.x_range.start) / (figure.inner_width || 600);

  function nearest(x, y) {
    let best = -1, least = REACH * perScreenPx();
    data.lines.forEach((line, i) => {
      for (let k = 0; k + 5 < line.length; k += 3) {
        const ax = line[k] / 10, ay = line[k + 1] / 10, dx = line[k + 3] / 10 - ax, dy = line[k + 4] / 10 - ay;
        const t = Math.min(1, Math.max(0, ((x - ax) * dx + (y - ay) * dy) / (dx * dx + dy * dy || 1)));
        const away = Math.hypot(x - ax - t * dx, y - ay - t * dy) - line[k + 2] / 10;
        if (away < least) [best, least] = [i, away];
      }
    });
    return best;
  }
  function nearestPlace(x, y) {
    if (!get("places").checked) return -1;
    const away = data.places.map((place) => Math.hypot(place.x - x, place.y - y));
    const best = away.indexOf(Math.min(...away));
    return best >= 0 && away[best] < REACH * perScreenPx() ? best : -1;
  }
  const cut = (ids) => ({ xs: ids.map((i) => xs[i]), ys: ids.map((i) => ys[i]) });
  function hover(event) {
    const i = nearest(event.x, event.y), tip = get("tip");
    under.data = cut(i < 0 ? [] : [i]);
    tip.hidden = i < 0;
    if (i < 0) return;
    const rest = facts_of(i).filter(([name]) => name !== "Network" && name !== "Viscosity");
    tip.replaceChildren(make("strong", `Segment ${segments.id[i]}`), ...rest.map(([name, said]) => make("span", `${name}: ${said}`)));
    const room = get("view").clientWidth - tip.offsetWidth - 4, below = get("view").clientHeight - tip.offsetHeight - 4;
    tip.style.left = `${Math.max(0, Math.min(event.sx + 16, room))}px`;
    tip.style.top = `${Math.max(0, Math.min(event.sy + 16, below))}px`;
  }
  figure.on_event("mousemove", hover);
  figure.on_event("mouseleave", () => { get("tip").hidden = true; under.data = cut([]); });
  figure.on_event("tap", (event) => {
    const place = nearestPlace(event.x, event.y);
    if (place >= 0) choose(-1, place);
    else choose(nearest(event.x, event.y));
  });
  function look(x, y, wide) {
    const half = Math.min(Math.max(wide, 12), data.width) / 2, ratio = data.height / data.width;
    figure.x_range.setv({ start: x - half, end: x + half });
    figure.y_range.setv({ start: y + half * ratio, end: y - half * ratio });
  }
  const middle = () => [(figure.x_range.start + figure.x_range.end) / 2, (figure.y_range.start + figure.y_range.end) / 2];
  const wide = () => figure.x_range.end - figure.x_range.start;
  const zoom = (factor) => look(...middle(), wide() / factor);
  const shift = (dx, dy) => look(middle()[0] + dx * 0.15 * wide(), middle()[1] + dy * 0.15 * wide(), wide());
  const wholePicture = () => look((data.width - 1) / 2, (data.height - 1) / 2, data.width);
  function lookAt(i) {
    const [left, right, top, low] = [Math.min(...xs[i]), Math.max(...xs[i]), Math.min(...ys[i]), Math.max(...ys[i])];
    look((left + right) / 2, (top + low) / 2, Math.max(2.5 * (right - left), (2.5 * (low - top) * data.width) / data.height, data.width / 6));
  }
  function showScale() {
    const longest = 0.2 * wide() * data.pixelSizeUm, decade = 10 ** Math.floor(Math.log10(longest));
    const length = Math.max(...[1, 2, 5].map((step) => step * decade).filter((one) => one <= longest));
    get("scale-bar").style.width = `${length / data.pixelSizeUm / perScreenPx()}px`;
    get("scale-words").textContent = length >= 1000 ? `${length / 1000} mm` : `${Number(length.toPrecision(1))} µm`;
  }

  // Colour bar and distribution
  const swatch = (colour, label) => {
    const one = make("span", "", { className: "swatch" }), box = make("i");
    box.style.background = colour;
    one.append(box, label);
    return one;
  };
  function showLegend() {
    const kinds = categories(), by = data.colourings[state.colouring], legend = get("legend");
    if (kinds) {
      const count = (kind) => all.filter(kind.has).length;
      legend.replaceChildren(...kinds.map((kind) => swatch(kind.colour, `${kind.label}: ${count(kind)}`)));
      return;
    }
    const ramp = make("div", "", { className: "ramp" }), ends = make("div", "", { className: "ends" });
    ramp.style.background = `linear-gradient(to right, ${data.palette.join(",")})`;
    if (by.low === undefined) return legend.replaceChildren(make("p", "No segment has this number."));
    const half = by.logarithmic ? Math.sqrt(by.low * by.high) : (by.low + by.high) / 2;
    ends.append(...[by.low, half, by.high].map((value) => make("span", shown(value, 2))));
    legend.replaceChildren(make("div", by.label), ramp, ends, swatch(data.grey, "no number"));
  }
  function bins() {
    const kinds = categories(), by = data.colourings[state.colouring];
    const mm = (ids) => ids.reduce((sum, i) => sum + (segments.length[i] ?? 0) / 1000, 0);
    if (kinds) return kinds.map((kind, k) => ({ left: k - 0.35, right: k + 0.35, top: mm(all.filter(kind.has)), colour: kind.colour }));
    const known = all.filter((i) => by.values[i] > 0), to = by.logarithmic ? Math.log : Number, back = by.logarithmic ? Math.exp : Number;
    const values = known.map((i) => to(by.values[i])), low = Math.min(...values), step = (Math.max(...values) - low) / 24 || 1;
    const found = Array.from({ length: 24 }, (_, k) => ({ left: back(low + k * step), right: back(low + (k + 1) * step), top: 0, colour: "" }));
    known.forEach((i, k) => {
      const bin = found[Math.min(23, Math.floor((values[k] - low) / step))];
      bin.top += mm([i]);
      bin.colour ||= colourOf(i);
    });
    return known.length ? found.map((bin) => ({ ...bin, colour: bin.colour || data.grey })) : [];
  }
  let spread = null; // the distribution's mark of the chosen segment
  function showDistribution() {
    const kinds = categories(), by = data.colourings[state.colouring], found = bins();
    const plot = Bokeh.Plotting.figure({
      height: 220, sizing_mode: "stretch_width", tools: "", toolbar_location: null, y_axis_label: "length (mm)",
      x_axis_type: !kinds && by.logarithmic ? "log" : "linear", x_axis_label: kinds ? state.colouring : by.label,
    });
    const column = (name) => found.map((bin) => bin[name]);
    plot.quad(field("left"), field("right"), field("bottom"), field("top"), {
      source: source({ left: column("left"), right: column("right"), top: column("top"), bottom: found.map(() => 0), colour: column("colour") }),
      fill_color: field("colour"), line_color: "#333333", line_width: 0.5,
    });
    if (kinds) {
      plot.xaxis.ticker = new Bokeh.FixedTicker({ ticks: kinds.map((_, k) => k) });
      plot.xaxis.major_label_overrides = new Map(kinds.map((kind, k) => [k, kind.label.split(" (")[0]]));
    }
    plot.xgrid.visible = false;
    spread = new Bokeh.Span({ dimension: "height", line_color: "#000000", line_width: 2, line_dash: "dashed", visible: false });
    plot.add_layout(spread);
    get("distribution").replaceChildren();
    Bokeh.Plotting.show(plot, get("distribution"));
    markChosen();
  }
  function markChosen() {
    const value = data.colourings[state.colouring]?.values[state.chosen];
    spread.setv({ location: value ?? 0, visible: value > 0 && !categories() });
  }

  // The table
  const KEYS = { segment: segments.id, network: segments.network, class: segments.vesselClass, length: segments.length, radius: segments.radius, viscosity: segments.viscosity, resistance: segments.resistance, share: segments.share, flags: segments.flags };
  function order() {
    const key = KEYS[state.sort], wanted = get("filter").value.trim().toLowerCase();
    const holds = (i) => `${segments.id[i]} network ${segments.network[i]} ${classOf(i)} ${segments.flags[i]}`.toLowerCase().includes(wanted);
    const rank = (i) => (key[i] === null || key[i] === "" ? undefined : key[i]);
    return all.filter((i) => !wanted || holds(i)).sort((a, b) => {
      const [p, q] = [rank(a), rank(b)];
      if (p === q) return a - b;
      if (p === undefined || q === undefined) return p === undefined ? 1 : -1; // what is not known stands last
      return (p < q ? -1 : 1) * (state.down ? -1 : 1);
    });
  }
  function row(i) {
    const line = make("tr"), first = make("td"), button = make("button", `${segments.id[i]}`, { type: "button" });
    button.setAttribute("aria-label", `Show segment ${segments.id[i]}`);
    first.append(button);
    const cells = [String(segments.network[i]), classOf(i), shown(segments.length[i]), withSe(i), shown(segments.viscosity[i]), resistance(i), percent(i), doubts(i).join(", ")];
    line.append(first, ...cells.map((text, k) => make("td", text, { className: k === 1 || k === 7 ? "" : "number" })));
    line.className = [i === state.chosen ? "chosen" : "", editOf(i, ["drop"]) ? "dropped" : ""].join(" ");
    if (i === state.chosen) line.setAttribute("aria-current", "true");
    line.addEventListener("click", () => choose(i, -1, true));
    return line;
  }
  function showTable() {
    const found = order(), last = Math.min(state.from + ROWS, found.length);
    get("rows").replaceChildren(...found.slice(state.from, last).map(row));
    get("range").textContent = found.length ? `${state.from + 1} to ${last} of ${found.length} segments` : "No segment matches.";
    get("before").disabled = !state.from;
    get("after").disabled = last >= found.length;
    document.querySelectorAll("[data-sort]").forEach((button) => {
      const mine = button.dataset.sort === state.sort;
      button.parentElement.setAttribute("aria-sort", mine ? (state.down ? "descending" : "ascending") : "none");
    });
  }

  // Choosing and editing
  function choose(i, place = -1, fromTable = false) {
    Object.assign(state, { chosen: i, place });
    around.data = cut(i < 0 ? [] : [i]);
    if (i >= 0 && fromTable) lookAt(i);
    if (i >= 0 && !fromTable) state.from = Math.floor(Math.max(0, order().indexOf(i)) / ROWS) * ROWS;
    showTable();
    const line = document.querySelector("#rows .chosen"), box = get("table-box");
    if (line && fromTable) line.querySelector("button").focus({ preventScroll: true });
    else if (line) box.scrollTop = line.offsetTop - box.clientHeight / 2;
    if (fromTable) get("view").scrollIntoView({ block: "nearest" });
    markChosen();
    showChosen();
  }
  function showChosen() {
    const { chosen, place } = state, told = get("chosen");
    const said = edits.filter((edit) => (place >= 0 ? edit.place === place : chosen >= 0 && edit.segment === chosen)).map((edit) => edit.value || edit.edit);
    document.querySelectorAll("[data-edit]").forEach((button) => {
      button.disabled = PLACES.includes(button.dataset.edit) ? place < 0 : chosen < 0;
      button.setAttribute("aria-pressed", String(said.includes(button.dataset.value || button.dataset.edit)));
    });
    if (place >= 0) {
      const { x, y, kind } = data.places[place];
      return told.replaceChildren(make("h3", `A ${kind} at (${x}, ${y})`), make("p", "Say which of the two it is."));
    }
    if (chosen < 0) return told.replaceChildren(make("p", "Choose a segment in the picture or in the table."));
    const list = make("dl");
    facts_of(chosen).forEach(([name, text]) => list.append(make("dt", name), make("dd", text)));
    told.replaceChildren(make("h3", `Segment ${segments.id[chosen]}`), list);
    doubts(chosen).forEach((flag) => told.append(make("p", `${flag}: ${data.flagMeaning[flag] ?? ""}`, { className: "small" })));
  }
  function edit(kind, value) {
    const { chosen, place } = state, atPlace = PLACES.includes(kind);
    const rivals = atPlace ? PLACES : FATES.includes(kind) ? FATES : ["class"];
    const k = edits.findIndex((one) => (atPlace ? one.place === place : one.segment === chosen) && rivals.includes(one.edit));
    const same = k >= 0 && edits[k].edit === kind && edits[k].value === value;
    if (k >= 0) edits.splice(k, 1);
    if (!same) {
      const [x, y] = atPlace ? [data.places[place].x, data.places[place].y] : data.anchors[chosen];
      edits.push(atPlace ? { x, y, edit: kind, value, place } : { x, y, edit: kind, value, segment: chosen });
    }
    changed();
  }
  function changed() {
    state.saved = false;
    showEdits();
    repaint();
    showLegend();
    showTable();
    showChosen();
  }
  function repaint() {
    drawn.data = painted();
    pieces.data = stubs();
    marks.data = { x: edits.map((one) => one.x), y: edits.map((one) => one.y) };
  }
  function showEdits() {
    get("edit-list").replaceChildren(...edits.map((one, k) => {
      const what = one.segment === undefined ? "" : `segment ${segments.id[one.segment]}, `;
      const item = make("li", `${one.edit}${one.value ? ` ${one.value}` : ""}: ${what}at (${one.x}, ${one.y})${one.former ? ", applied here" : ""} `);
      const away = make("button", "Remove", { type: "button", onclick: () => { edits.splice(k, 1); changed(); } });
      away.setAttribute("aria-label", `Remove the edit ${one.edit} at ${one.x}, ${one.y}`);
      item.append(away);
      return item;
    }));
    get("no-edits").hidden = edits.length > 0;
    get("download").disabled = state.saved;
  }
  function download() {
    const lines_ = ["x_px,y_px,edit,value", ...edits.map((one) => `${one.x},${one.y},${one.edit},${one.value}`)];
    const link = make("a", "", { download: `${data.imageId}_edits.csv` });
    link.href = URL.createObjectURL(new Blob([`${lines_.join("\n")}\n`], { type: "text/csv" }));
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 1000);
    state.saved = true;
    showEdits();
  }

  // What a person can press
  const on = (id, event, act) => get(id).addEventListener(event, act);
  get("colouring").value = state.colouring;
  on("colouring", "change", () => {
    state.colouring = get("colouring").value;
    repaint();
    showLegend();
    showDistribution();
  });
  on("places", "change", () => {
    const some = get("places").checked ? data.places : [];
    rings.data = { x: some.map((one) => one.x), y: some.map((one) => one.y) };
  });
  on("nearer", "click", () => zoom(1.5));
  on("farther", "click", () => zoom(1 / 1.5));
  on("whole", "click", wholePicture);
  on("figure", "keydown", (event) => {
    const acts = { "+": () => zoom(1.5), "=": () => zoom(1.5), "-": () => zoom(1 / 1.5), 0: wholePicture, Escape: () => choose(-1), ArrowLeft: () => shift(-1, 0), ArrowRight: () => shift(1, 0), ArrowUp: () => shift(0, -1), ArrowDown: () => shift(0, 1) };
    if (!acts[event.key] || event.ctrlKey || event.metaKey) return;
    event.preventDefault();
    acts[event.key]();
  });
  on("filter", "input", () => { state.from = 0; showTable(); });
  on("before", "click", () => { state.from -= ROWS; showTable(); });
  on("after", "click", () => { state.from += ROWS; showTable(); });
  document.querySelectorAll("[data-sort]").forEach((button) => button.addEventListener("click", () => {
    const key = button.dataset.sort;
    Object.assign(state, { down: state.sort === key ? !state.down : !["segment", "network", "class", "flags"].includes(key), sort: key, from: 0 });
    showTable();
  }));
  document.querySelectorAll("[data-edit]").forEach((button) => button.addEventListener("click", () => edit(button.dataset.edit, button.dataset.value)));
  on("download", "click", download);
  addEventListener("beforeunload", (event) => { if (!state.saved) event.preventDefault(); });

  figure.x_range.properties.start.change.connect(showScale);
  figure.properties.inner_width.change.connect(showScale);
  repaint();
  showLegend();
  showTable();
  showEdits();
  showChosen();
  Bokeh.Plotting.show(figure, get("figure")).then(() => {
    showScale();
    showDistribution();
    document.body.dataset.ready = "yes";
  });
})();
