"use strict";
(async () => {
  const $ = (id) => document.getElementById(id);
  const data = JSON.parse($("data").textContent);
  const pictures = JSON.parse($("pictures").textContent);
  const frames = data.frames, total = frames.x.length;
  const SYMBOLS = ["circle", "square", "triangle-up", "diamond", "cross", "triangle-down"];
  const MINUS = "\u2212";
  const root = document.documentElement;
  let current = -1;

  // ---------------------------------------------------------------- small helpers

  const ink = (name) => getComputedStyle(root).getPropertyValue("--" + name).trim();
  const bodyInk = (body) => ink("body-" + (body % 4));
  const word = (column, index) => frames.texts[frames[column][index]];
  const signed = (value, digits) => {
    if (value === null) return "\u2013";
    const shown = Math.abs(value).toFixed(digits);
    return Number(shown) === 0 ? shown : (value > 0 ? "+" : MINUS) + shown;
  };
  const element = (tag, content, attributes = {}) => {
    const made = document.createElement(tag);
    if (content !== null) made.textContent = content;
    for (const [name, value] of Object.entries(attributes)) made.setAttribute(name, value);
    return made;
  };
  const plain = (text) => text.replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;");
  const light = (index) => (frames.cct[index] === null ? "no colour temperature" : frames.cct[index] + " K");
  const indices = (wanted) => [...frames.x.keys()].filter(wanted);
  const pick = (column, which) => which.map((index) => frames[column][index]);

  const picturesOf = (index) => {
    const card = document.querySelector(`.card[data-place="${index}"]`);
    if (!card) return pictures[index] || [null, null];
    return [...card.querySelectorAll("figure")].map((figure) => figure.querySelector("img")?.src ?? null);
  };

  // ---------------------------------------------------------------- one frame

  const showFrame = (index) => {
    if (!(index >= 0 && index < total)) return;
    current = index;
    const name = frames.name[index];
    $("step").value = index;
    $("step").setAttribute("aria-valuetext", `${name}, ${index + 1} of ${total}`);
    $("frame-name").textContent = name;
    $("frame-pair").replaceChildren(...picturesOf(index).map((source, side) => {
      const when = side ? "after" : "before", figure = element("figure", null);
      figure.append(source ? element("img", null, { src: source, alt: `${name} ${when}` })
        : element("div", "no picture", { class: "no-picture" }), element("figcaption", when));
      return figure;
    }));
    const reasons = frames.why[index].map((sentence) => element("li", frames.texts[sentence]));
    const list = element("ul", null, { class: "reasons" });
    list.append(...reasons);
    $("frame-facts").replaceChildren(list, factList(index));
    markCurrent();
  };

  const factList = (index) => {
    const stretch = data.stretches[frames.stretch[index]];
    const rows = [
      ["Cast", `${word("words", index)}; yellow\u2013blue ${signed(frames.yb[index], 3)}, green\u2013magenta ${signed(frames.gm[index], 3)}`],
      ["Light", `${light(index)}, Duv ${signed(frames.duv[index], 4)}`],
      ["Doubt", frames.doubt[index] === null ? "cannot be told" : frames.doubt[index].toFixed(1) + "\u00b0"],
      ["Done", [word("shift", index), word("reason", index)].filter(Boolean).join("; ")],
      ["Left", frames.leftDe[index] === null ? "not told" : `${frames.leftDe[index].toFixed(1)} \u0394E 2000, of ${frames.de[index] === null ? "\u2013" : frames.de[index].toFixed(1)}`],
      ["Taken", `${frames.when[index].replace("T", " ") || "time not known"}, body ${data.bodies[frames.body[index]].label}${stretch ? ", stretch " + stretch.name : ""}`],
    ];
    const facts = element("dl", null, { class: "facts" });
    for (const [term, value] of rows) {
      const row = element("div", null);
      row.append(element("dt", term), element("dd", value));
      facts.append(row);
    }
    return facts;
  };

  const jumpTo = (index) => {
    showFrame(index);
    $("frame-name").focus({ preventScroll: true });
    $("viewer").scrollIntoView({ block: "center" });
  };

  const nextToLookAt = () => {
    const look = indices((index) => frames.eye[index]);
    if (look.length) showFrame(look.find((index) => index > current) ?? look[0]);
  };

  const fillStrips = () => {
    for (const strip of document.querySelectorAll(".strip")) {
      for (const index of strip.dataset.places.split(" ").map(Number)) {
        const button = element("button", null, { type: "button", "aria-label": `Show ${frames.name[index]}`, title: frames.name[index] });
        for (const source of picturesOf(index)) if (source) button.append(element("img", null, { src: source, alt: "" }));
        button.addEventListener("click", () => jumpTo(index));
        strip.append(button);
      }
    }
  };

  // ---------------------------------------------------------------- charts

  const hover = (index) => [
    `<b>${plain(frames.name[index])}</b>`,
    `${frames.when[index].replace("T", " ").slice(0, 19)} body ${plain(data.bodies[frames.body[index]].label)}`,
    plain(word("words", index)),
    `yellow\u2013blue ${signed(frames.yb[index], 3)}, green\u2013magenta ${signed(frames.gm[index], 3)}`,
    `${light(index)}, doubt ${frames.doubt[index] === null ? "not known" : frames.doubt[index].toFixed(1) + "\u00b0"}`,
    ...(frames.eye[index] ? ["<b>to look at by eye</b>"] : []),
  ].join("<br>");

  const axis = (extra) => ({
    gridcolor: ink("rule"), linecolor: ink("rule"), zerolinecolor: ink("quiet"), zerolinewidth: 1.5,
    tickfont: { color: ink("quiet") }, fixedrange: true, ...extra,
  });
  const layout = (extra) => ({
    paper_bgcolor: ink("sheet"), plot_bgcolor: ink("sheet"), showlegend: false, hovermode: "closest",
    font: { family: "system-ui, sans-serif", size: 13, color: ink("ink") },
    hoverlabel: { bgcolor: ink("sheet"), bordercolor: ink("ink"), font: { color: ink("ink") }, align: "left" }, ...extra,
  });
  const unit = data.opponent === "Oklab" ? 0.03 : 3;
  const CONFIG = { displayModeBar: false, responsive: true, showTips: false };
  const note = (text, x, y, extra) => ({ text, x, y, showarrow: false, font: { color: ink("quiet"), size: 12 }, ...extra });

  const points = (which, x, y, marker, extra = {}) => ({
    type: "scatter", mode: "markers", x, y, customdata: which, text: which.map(hover),
    hovertemplate: "%{text}<extra></extra>", marker, ...extra,
  });

  const band = (which, column, half, axes, body) => {
    const x = pick("x", which), middle = pick(column, which), width = pick(half, which);
    const edge = (sign) => middle.map((value, k) => value + sign * width[k]);
    return { type: "scatter", mode: "lines", x: [...x, ...[...x].reverse()], y: [...edge(1), ...edge(-1).reverse()],
      fill: "toself", fillcolor: bodyInk(body) + "38", line: { width: 0 }, hoverinfo: "skip", ...axes };
  };
  const course = (which, column, axes, line) => ({
    type: "scatter", mode: "lines", x: pick("x", which), y: pick(column, which), line, hoverinfo: "skip", ...axes });

  const panel = (column, used, half, axes) => {
    const traces = [], lines = [];
    data.stretches.forEach((stretch, k) => {
      const which = indices((i) => frames.stretch[i] === k && frames.x[i] !== null && frames[used][i] !== null && frames[half][i] !== null);
      if (!which.length) return;
      traces.push(band(which, used, half, axes, stretch.body));
      lines.push(course(which, used, axes, { color: ink("sheet"), width: 5 }), course(which, used, axes, { color: bodyInk(stretch.body), width: 2.5 }));
    });
    const many = total > 400 || innerWidth < 700;
    data.bodies.forEach((_, body) => {
      const which = indices((i) => frames.body[i] === body && frames.x[i] !== null && frames[column][i] !== null);
      traces.push(points(which, pick("x", which), pick(column, which),
        { symbol: SYMBOLS[body % 6], size: many ? 4 : 6, color: bodyInk(body), opacity: many ? 0.4 : 0.6 },
        { ...axes, error_y: { type: "data", array: which.map((i) => (frames.stretch[i] < 0 ? frames[half][i] : null)), thickness: 1, width: 0, color: bodyInk(body) } }));
    });
    const look = indices((i) => frames.eye[i] && frames.x[i] !== null && frames[column][i] !== null);
    const rings = points(look, pick("x", look), pick(column, look), { symbol: "circle-open", size: 13, color: ink("look"), line: { width: 2 } }, axes);
    return [...traces, ...lines, rings];
  };

  const spanShapes = (width) => {
    const placed = frames.x.filter((x) => x !== null);
    const [low, high] = [Math.min(...placed), Math.max(...placed)];
    const shapes = [], texts = [];
    for (const stretch of data.stretches) {
      if (!stretch.ends) continue;
      const least = (high - low) * 0.002, lane = data.bodies.length - 1 - stretch.body;
      const [from, to] = [stretch.ends[0] - least, stretch.ends[1] + least];
      shapes.push({ type: "rect", xref: "x", yref: "y3", x0: from, x1: to, y0: lane - 0.4, y1: lane + 0.4,
        fillcolor: stretch.hex, line: { color: ink("quiet"), width: 1 } });
      for (const x of stretch.ends) shapes.push({ type: "line", xref: "x", yref: "paper", x0: x, x1: x, y0: 0, y1: 0.86,
        line: { color: ink("rule"), width: 1, dash: "dot" } });
      const pixels = width / Math.max(high - low, 1);
      const next = Math.min(high + 60 / pixels, ...data.stretches.filter((one) => one.body === stretch.body && one.ends?.[0] > stretch.ends[1]).map((one) => one.ends[0]));
      const fits = (label, room) => label.length * 7.5 < room * pixels;
      const long = `${stretch.name} \u00b7 ${stretch.light}`;
      const inside = [long, stretch.name].find((label) => fits(label, to - from));
      const beside = inside ? undefined : [long, stretch.name].find((label) => fits(label, next - to));
      if (inside) texts.push(note(plain(inside), (from + to) / 2, lane, { yref: "y3", font: { color: "#111111", size: 12 } }));
      else if (beside) texts.push(note(plain(beside), to, lane, { yref: "y3", xanchor: "left", xshift: 2 }));
    }
    return { shapes, texts };
  };

  const drawCourse = (chart, paperWidth) => {
    const { shapes, texts } = spanShapes((paperWidth || chart.clientWidth) - 80);
    const end = (text, y, anchor) => note(text, 0.004, y, { xref: "paper", yref: "paper", xanchor: "left", yanchor: anchor });
    const top = { xaxis: "x", yaxis: "y" }, low = { xaxis: "x", yaxis: "y2" };
    const pauses = data.pauses.map(([begin, length]) => ({ values: [begin], dvalue: length }));
    return Plotly.react(chart, [...panel("yb", "usedYb", "halfYb", top), ...panel("gm", "usedGm", "halfGm", low)], layout({
      width: paperWidth, margin: { l: 56, r: 14, t: 10, b: 62 }, shapes, dragmode: matchMedia("(pointer: coarse)").matches ? false : "zoom",
      annotations: [...texts, end("yellow \u2191", 0.86, "top"), end("blue \u2193", 0.45, "bottom"), end("magenta \u2191", 0.41, "top"), end("green \u2193", 0, "bottom")],
      xaxis: axis({ fixedrange: false, type: data.timed ? "date" : "linear", anchor: "y2", tickformat: data.timed ? "%H:%M\n%-d %b" : ",d", rangebreaks: data.timed ? pauses : undefined,
        title: { standoff: 8, text: data.timed ? "capture time" : "frame, in the order of the files", font: { color: ink("quiet") } } }),
      yaxis3: axis({ domain: [0.88, 1], range: [-0.6, data.bodies.length - 0.4], tickvals: data.bodies.map((_, k) => data.bodies.length - 1 - k),
        ticktext: data.bodies.map((body) => plain(body.label)), showgrid: false, zeroline: false }),
      yaxis: axis({ domain: [0.45, 0.86], autorangeoptions: { include: [-unit, unit] } }),
      yaxis2: axis({ domain: [0, 0.41], autorangeoptions: { include: [-unit, unit] } }),
    }), CONFIG);
  };

  const markCurrent = () => {  // a line laid over the chart: drawing the chart anew for each step would be slow
    const chart = $("course-chart"), axis = chart._fullLayout?.xaxis, cursor = $("cursor");
    const x = current < 0 ? null : frames.x[current];
    const at = axis && x !== null ? axis.d2p(x) : NaN;
    cursor.hidden = !(at >= 0 && at <= axis._length);
    if (!cursor.hidden) cursor.style.left = `${axis._offset + at}px`;
  };

  const drawPlane = (chart, paperWidth) => {
    const outline = data.plausible;
    const traces = [
      { type: "scatter", mode: "lines", x: outline.gm, y: outline.yb, fill: "toself", fillcolor: ink("band"), line: { width: 0 }, hoverinfo: "skip" },
      { type: "scatter", mode: "lines", x: data.locus.gm, y: data.locus.yb, line: { color: ink("locus"), width: 1.5, dash: "dash" }, hoverinfo: "skip" },
      ...data.isotherms.map((line) => ({ type: "scatter", mode: "lines+text", x: line.gm, y: line.yb, text: ["", line.text], textposition: "middle right",
        textfont: { color: ink("quiet"), size: 12 }, line: { color: ink("locus"), width: 0.75 }, hoverinfo: "skip" })),
    ];
    data.bodies.forEach((_, body) => {
      const own = (column) => indices((i) => frames.body[i] === body && frames[column][i] !== null);
      const before = own("yb"), after = own("leftYb"), symbol = SYMBOLS[body % 6];
      traces.push(points(before, pick("gm", before), pick("yb", before), { symbol: symbol + "-open", size: 7, color: bodyInk(body), opacity: 0.8 }));
      traces.push(points(after, pick("leftGm", after), pick("leftYb", after), { symbol, size: 5, color: bodyInk(body), opacity: 0.8 }));
    });
    const look = indices((i) => frames.eye[i] && frames.yb[i] !== null);
    traces.push(points(look, pick("gm", look), pick("yb", look), { symbol: "circle-open", size: 14, color: ink("look"), line: { width: 2 } }));
    const named = data.stretches.filter((stretch) => stretch.yb !== null && stretch.gm !== null).slice(0, 24);
    const labels = named.map((stretch) => note(plain(stretch.name), stretch.gm, stretch.yb, { showarrow: true, arrowhead: 0, arrowcolor: ink("quiet"),
      ax: stretch.body % 2 ? -36 : 36, ay: stretch.body % 4 < 2 ? -16 : 22, font: { color: ink("ink"), size: 13 }, bgcolor: ink("sheet") }));
    const all = (columns) => columns.flatMap((column) => frames[column]).filter((value) => value !== null);
    const reach = (values) => [Math.min(-unit, ...values) - unit / 2, Math.max(unit, ...values) + unit / 2];
    return Plotly.react(chart, traces, layout({
      width: paperWidth, margin: { l: 56, r: 14, t: 14, b: 48 }, dragmode: false,
      annotations: [...labels,
        note("yellow", 0.5, 1, { xref: "paper", yref: "paper", yanchor: "top" }), note("blue", 0.5, 0, { xref: "paper", yref: "paper", yanchor: "bottom" }),
        note("green", 0, 0.5, { xref: "paper", yref: "paper", xanchor: "left" }), note("magenta", 1, 0.5, { xref: "paper", yref: "paper", xanchor: "right" })],
      xaxis: axis({ range: reach(all(["gm", "leftGm"])), title: { text: `green\u2013magenta (${data.opponent})`, font: { color: ink("quiet") } } }),
      yaxis: axis({ range: reach(all(["yb", "leftYb"])), scaleanchor: "x", title: { text: `yellow\u2013blue (${data.opponent})`, font: { color: ink("quiet") } } }),
    }), CONFIG);
  };

  const drawResiduals = (chart, paperWidth) => {
    const { width, starts, before, after } = data.histogram;
    const bars = (counts, name, marker) => ({ type: "bar", name, x: starts.map((start) => start + width / 2), y: counts, width, marker,
      text: starts.map((start, k) => `${start}${k === starts.length - 1 ? " and more" : " to " + (start + width)}`), textposition: "none",
      hovertemplate: `${name}, \u0394E 2000 %{text}: %{y} frames<extra></extra>` });
    return Plotly.react(chart, [
      bars(before, "before", { color: ink("sheet"), line: { color: ink("ink"), width: 1.5 }, pattern: { shape: "/", fgcolor: ink("quiet"), bgcolor: ink("sheet"), size: 7 } }),
      bars(after, "after", { color: ink("ink") }),
    ], layout({
      width: paperWidth, barmode: "overlay", bargap: 0, showlegend: true, legend: { x: 1, xanchor: "right", y: 1, bgcolor: ink("sheet") }, dragmode: false,
      margin: { l: 56, r: 14, t: 14, b: 48 },
      xaxis: axis({ title: { text: "cast, \u0394E 2000 of a mid grey", font: { color: ink("quiet") } }, rangemode: "tozero" }),
      yaxis: axis({ title: { text: "frames", font: { color: ink("quiet") } } }),
    }), CONFIG);
  };

  const draw = async (paperWidth) => {
    for (const [id, drawing] of [["course-chart", drawCourse], ["plane-chart", drawPlane], ["residual-chart", drawResiduals]]) {
      const chart = $(id);
      if (!chart) continue;
      chart.classList.add("drawn");
      await drawing(chart, paperWidth);
      if (chart.dataset.heard || id === "residual-chart") continue;
      chart.dataset.heard = "yes";
      if (id === "course-chart") chart.on("plotly_afterplot", markCurrent);
      chart.on("plotly_click", (event) => jumpTo(event.points[0].customdata));
    }
    markCurrent();
  };

  const loadLibrary = async () => {
    const packed = Uint8Array.from(atob($("chart-library").textContent), (character) => character.charCodeAt(0));
    const unpacked = new Blob([packed]).stream().pipeThrough(new DecompressionStream("gzip"));
    document.head.append(element("script", await new Response(unpacked).text()));
  };

  // ---------------------------------------------------------------- start

  fillStrips();
  if (total) {
    $("viewer").hidden = false;
    $("step").addEventListener("input", (event) => showFrame(Number(event.target.value)));
    $("step-eye").addEventListener("click", nextToLookAt);
    $("step-eye").hidden = !frames.eye.some(Boolean);
    for (const link of document.querySelectorAll(".to-course")) {
      link.addEventListener("click", (event) => { event.preventDefault(); jumpTo(Number(link.dataset.place)); });
    }
    showFrame(Math.max(frames.eye.indexOf(1), 0));
  }
  try {
    await loadLibrary();
    await draw();
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => draw());
    addEventListener("beforeprint", () => { root.dataset.paper = "yes"; draw(690); });
    addEventListener("afterprint", () => { delete root.dataset.paper; draw(); });
  } catch (error) {
    document.querySelector(".chart-missing").hidden = false;
    console.warn(error);
  }
  root.dataset.ready = "yes";
})();
