/* Live charts, slider, tables. Without it the page shows the same answers as drawings. */
(() => {
  "use strict";

  const data = JSON.parse(document.getElementById("data").textContent);
  const charts = {};
  const root = document.documentElement;
  const byId = (id) => document.getElementById(id);

  /* Small builders: text always goes in as text. */
  const make = (tag, attributes = {}, ...children) => {
    const element = document.createElement(tag);
    for (const [key, value] of Object.entries(attributes)) element.setAttribute(key, value);
    element.append(...children);
    return element;
  };
  const f32 = (text) => {
    const bytes = Uint8Array.from(atob(text), (c) => c.charCodeAt(0));
    return new Float32Array(bytes.buffer);
  };
  const i16 = (text) => {
    const bytes = Uint8Array.from(atob(text), (c) => c.charCodeAt(0));
    return new Int16Array(bytes.buffer);
  };

  /* Numbers: a point stays a point, minus signs are true ones, powers of ten are raised. */
  const raised = (power) => String(power).replace(/[-0-9]/g, (c) => (c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[c]));
  const pretty = (text) => {
    const [head, power] = text.split("e");
    return head.replace("-", "−") + (power ? "×10" + raised(Number(power)) : "");
  };
  const show = (value, digits = 4) => {
    if (value === null || !Number.isFinite(value)) return "–";
    const size = Math.abs(value), far = value !== 0 && (size < 1e-4 || size >= 1e6);
    const short = Number(value.toPrecision(digits));
    return pretty(far ? short.toExponential() : String(short));
  };
  const label = (word, unit) => (unit ? `${word} [${unit}]` : word);

  const colours = () => {
    const style = getComputedStyle(root);
    const names = ["ink", "grey", "rule", "blue", "vermillion", "band", "paper", "wash"];
    return Object.fromEntries(names.map((n) => [n, style.getPropertyValue("--" + n).trim()]));
  };
  let paint = colours();
  const rem = () => parseFloat(getComputedStyle(root).fontSize);
  const font = () => `${0.8 * rem()}px ${getComputedStyle(document.body).fontFamily}`;

  /* Axes and ranges. */
  const axis = (more = {}) => ({
    stroke: paint.ink, font: font(), grid: { stroke: paint.rule, width: 1 },
    ticks: { stroke: paint.grey, width: 1, size: 5 }, gap: 4,
    values: (_, splits) => splits.map((v) => show(v, 6)), ...more,
  });
  const yAxis = (more = {}) => axis({
    size: (_, values) => 14 + 0.5 * rem() * Math.max(5, ...(values || [""]).map((v) => v.length)),
    space: 1.9 * rem(), ...more,
  });
  const xAxis = (text, more = {}) => axis({
    label: text, labelFont: font(), labelSize: 1.4 * rem(), size: 1.9 * rem(),
    space: 4.5 * rem(), ...more,
  });
  const padded = (values, share = 0.06) => {
    let low = Infinity, high = -Infinity;
    for (const list of values) {
      for (const v of list) {
        if (v === null || !Number.isFinite(v)) continue;
        if (v < low) low = v;
        if (v > high) high = v;
      }
    }
    if (!(high >= low)) return [0, 1];
    const room = (high - low || Math.abs(high) || 1) * share;
    return [low - room, high + room];
  };
  const steps = uPlot.paths.stepped({ align: 1 });
  const closed = (values) => [...values, values.length ? values[values.length - 1] : null];
  const line = (colour, more = {}) => ({
    stroke: colour, width: 0.11 * rem(), pxAlign: 0, points: { show: false }, spanGaps: true, ...more,
  });
  const stepped = (colour, more = {}) => line(colour, { paths: steps, pxAlign: 1, ...more });
  const dots = (colour, more = {}) => ({
    stroke: colour, paths: () => null, points: { show: true, size: 0.38 * rem(), fill: colour, width: 0 }, ...more,
  });

  /* One chart in a host; it follows the width of its column. */
  const chart = (name, host, options, values) => {
    const size = () => ({ width: Math.max(host.clientWidth, 200), height: options.high * rem() });
    const plot = new uPlot({
      ...size(), padding: [10, 14, 0, 0], legend: { show: false },
      cursor: { y: false, drag: { x: false, y: false }, points: { show: false },
                sync: options.sync ? { key: "x", setSeries: false } : undefined },
      ...options.plot,
    }, values, host);
    charts[name] = plot;
    plot.fit = () => { if (host.clientWidth) plot.setSize(size()); };
    return plot;
  };

  const alongX = { time: false, range: () => data.extent, auto: false };
  const place = () => xAxis(label("x", data.units.position));

  const vertical = (u, x, colour, dash) => {
    const at = Math.round(u.valToPos(x, "x", true)) + 0.5;
    u.ctx.save();
    u.ctx.strokeStyle = colour;
    u.ctx.lineWidth = uPlot.pxRatio;
    u.ctx.setLineDash(dash.map((d) => d * uPlot.pxRatio));
    u.ctx.beginPath();
    u.ctx.moveTo(at, u.bbox.top);
    u.ctx.lineTo(at, u.bbox.top + u.bbox.height);
    u.ctx.stroke();
    u.ctx.restore();
  };
  const horizontal = (u, from, to, y) => {
    const at = Math.round(u.valToPos(y, "y", true)) + 0.5;
    u.ctx.save();
    u.ctx.strokeStyle = paint.ink;
    u.ctx.lineWidth = 1.4 * uPlot.pxRatio;
    u.ctx.setLineDash([5 * uPlot.pxRatio, 3 * uPlot.pxRatio]);
    u.ctx.beginPath();
    u.ctx.moveTo(u.valToPos(from, "x", true), at);
    u.ctx.lineTo(u.valToPos(to, "x", true), at);
    u.ctx.stroke();
    u.ctx.restore();
  };
  const zoneMarks = (u) => {
    const { ctx, bbox } = u, ends = [];
    for (const zone of data.source.zones) {
      for (const edge of [zone.from, zone.to]) vertical(u, edge, paint.grey, [1, 3]);
      if (zone.mean !== null) horizontal(u, zone.from, zone.to, zone.mean);
      const left = u.valToPos(zone.from, "x", true), right = u.valToPos(zone.to, "x", true);
      ctx.save();
      ctx.fillStyle = paint.ink;
      ctx.font = `${0.75 * rem() * uPlot.pxRatio}px ${getComputedStyle(document.body).fontFamily}`;
      ctx.textAlign = "center";
      ctx.textBaseline = "top";
      let row = ends.findIndex((end) => zone.from >= end);
      if (row < 0) row = ends.length;
      ends[row] = zone.to;
      const top = bbox.top + (2 + rem() * row) * uPlot.pxRatio;
      ctx.fillText(fitted(ctx, zone.name, right - left - 6), (left + right) / 2, top);
      ctx.restore();
    }
    data.source.lumped.forEach((part) => vertical(u, part.at, paint.vermillion, [7, 4]));
  };
  const fitted = (ctx, text, room) => {
    if (ctx.measureText(text).width <= room) return text;
    let cut = [...text];
    while (cut.length && ctx.measureText(cut.join("") + "…").width > room) cut.pop();
    return cut.length ? cut.join("") + "…" : "";
  };

  /* Keys: what each line means, with a sample of it. */
  const SVG = "http://www.w3.org/2000/svg";
  const sample = (kind) => {
    const svg = document.createElementNS(SVG, "svg");
    svg.setAttribute("viewBox", "0 0 28 10");
    svg.setAttribute("aria-hidden", "true");
    const add = (tag, attributes) => {
      const shape = document.createElementNS(SVG, tag);
      for (const [k, v] of Object.entries(attributes)) shape.setAttribute(k, v);
      svg.append(shape);
    };
    const [shape, colour] = kind.split(" ");
    const ink = `var(--${colour})`;
    if (shape === "area") add("rect", { width: 28, height: 10, fill: ink });
    if (shape === "dot") add("circle", { cx: 14, cy: 5, r: 3.5, fill: ink });
    if (shape === "ring") add("circle", { cx: 14, cy: 5, r: 3.5, fill: "none", stroke: ink, "stroke-width": 2 });
    if (shape === "cross") add("path", { d: "M10 1L18 9M10 9L18 1", stroke: ink, "stroke-width": 1.6 });
    if (shape === "line") add("path", { d: "M0 5H28", stroke: ink, "stroke-width": 2.2 });
    if (shape === "dash") add("path", { d: "M0 5H28", stroke: ink, "stroke-width": 2.2, "stroke-dasharray": "7 4" });
    return svg;
  };
  const key = (entries) => make("ul", { class: "key" },
    ...entries.map(([kind, text]) => make("li", {}, sample(kind), text)));

  const panelHost = (host, title) => {
    const area = make("div", { class: "plot", role: "img", "aria-label": title });
    host.append(make("div", { class: "panel" }, make("p", { class: "panel-title", "aria-hidden": "true" }, title), area));
    return area;
  };
  const open = (id, words) => {
    const host = byId("live-" + id);
    if (!host) return null;
    host.replaceChildren();
    host.hidden = false;
    if (words) host.append(key(words));
    return host;
  };

  /* Source. */
  const sourceRange = () => padded([data.source.estimate, data.source.lower, data.source.upper], 0.1);
  const sourceTitle = () => label(data.word, data.units.source);
  const drawSource = () => {
    const s = data.source, banded = s.lower.some((v) => v !== null);
    const words = [["line blue", "estimate"]];
    if (banded) words.unshift(["area band", "band, point by point"]);
    if (s.zones.some((z) => z.mean !== null)) words.push(["dash ink", "mean of a zone"]);
    if (s.lumped.length) words.push(["dash vermillion", s.lumped.map((p) => `${p.name}: ${p.text}`).join("; ")]);
    const host = open("source", words);
    if (!host) return;
    const range = sourceRange();
    const still = { stroke: "transparent", width: 0, paths: steps, points: { show: false } };
    chart("source", panelHost(host, sourceTitle()), {
      high: 18, sync: true, plot: {
        scales: { x: alongX, y: { range: () => range } }, axes: [place(), yAxis()],
        series: [{}, still, still, stepped(paint.blue)],
        bands: banded ? [{ series: [2, 1], fill: paint.band }] : [],
        hooks: { draw: [zoneMarks] },
      },
    }, [s.edges, closed(s.lower), closed(s.upper), closed(s.estimate)]);
  };

  /* Readings: one chart of values and one of residuals for each kind. */
  const bars = (panel) => (u) => {
    if (panel.x.length > 200) return;
    u.ctx.save();
    u.ctx.strokeStyle = paint.ink;
    u.ctx.lineWidth = uPlot.pxRatio;
    u.ctx.beginPath();
    panel.x.forEach((x, i) => {
      const v = panel.value[i], sd = panel.sd[i];
      if (v === null || sd === null) return;
      const at = u.valToPos(x, "x", true);
      u.ctx.moveTo(at, u.valToPos(v - sd, "y", true));
      u.ctx.lineTo(at, u.valToPos(v + sd, "y", true));
    });
    u.ctx.stroke();
    u.ctx.restore();
  };
  const crosses = (panel) => (u) => {
    u.ctx.save();
    u.ctx.strokeStyle = paint.grey;
    u.ctx.lineWidth = 1.4 * uPlot.pxRatio;
    u.ctx.beginPath();
    u.ctx.rect(u.bbox.left, u.bbox.top, u.bbox.width, u.bbox.height);
    u.ctx.clip();
    u.ctx.beginPath();
    const r = 3.5 * uPlot.pxRatio;
    for (const [x, v] of panel.off) {
      const a = u.valToPos(x, "x", true), b = u.valToPos(v, "y", true);
      u.ctx.moveTo(a - r, b - r); u.ctx.lineTo(a + r, b + r);
      u.ctx.moveTo(a - r, b + r); u.ctx.lineTo(a + r, b - r);
    }
    u.ctx.stroke();
    u.ctx.restore();
  };
  const expected = (u) => {
    const top = u.valToPos(2, "y", true), bottom = u.valToPos(-2, "y", true);
    u.ctx.save();
    u.ctx.fillStyle = paint.wash;
    u.ctx.fillRect(u.bbox.left, top, u.bbox.width, bottom - top);
    u.ctx.restore();
  };
  /* Ticks of a residual chart: ± 2, and multiples of it for as many as there is room. */
  const sds = (u, axis, low, high) => {
    const most = Math.max(-low, high);
    let step = 2;
    for (let k = 0; most > 2.5 * step; k += 1) step = [4, 10, 20][k % 3] * 10 ** Math.floor(k / 3);
    const out = [];
    for (let k = Math.ceil(low / step); k <= Math.floor(high / step); k += 1) out.push(k * step);
    return out;
  };
  const groupsOf = (panel) => [...new Set(panel.group)];
  const byGroup = (panel, values) => {
    const groups = groupsOf(panel);
    if (groups.length > 6) return [values];
    return groups.map((g) => values.map((v, i) => (panel.group[i] === g ? v : null)));
  };
  const smooth = (panel) => (u) => {
    if (!panel.curve) return;
    u.ctx.save();
    u.ctx.beginPath();
    u.ctx.rect(u.bbox.left, u.bbox.top, u.bbox.width, u.bbox.height);
    u.ctx.clip();
    u.ctx.strokeStyle = paint.blue;
    u.ctx.lineWidth = 0.11 * rem() * uPlot.pxRatio;
    u.ctx.beginPath();
    panel.curveX.forEach((x, i) => u.ctx.lineTo(u.valToPos(x, "x", true), u.valToPos(panel.curve[i], "y", true)));
    u.ctx.stroke();
    u.ctx.restore();
  };
  const pointed = (u, panel) => {
    const i = u.cursor.idx;
    if (u.cursor.left >= 0 && i !== null && i !== undefined && u.cursor.event) choose(panel.rows[i]);
  };
  const readingDots = (panel) => dots(paint.ink, {
    points: { show: true, size: (panel.x.length > 200 ? 0.18 : 0.38) * rem(), fill: paint.ink, width: 0 },
  });
  const rings = () => ({
    stroke: paint.blue, paths: () => null,
    points: { show: true, size: 0.62 * rem(), width: 0.09 * rem(), stroke: paint.blue, fill: "transparent" },
  });
  /* `answer`: the response as a curve with a ring where each reading is predicted; otherwise the
     predictions alone, joined within their group. */
  const ringed = (panel) => panel.curve !== null && panel.x.length <= 200;
  const panelPlot = (panel, range, answer) => {
    const count = byGroup(panel, panel.predicted).length;
    const alone = groupsOf(panel).length > 6 ? { paths: () => null, points: { show: true, size: 3 } } : {};
    const curved = answer && ringed(panel);
    const predicted = () => {
      if (curved) return rings();
      return answer ? line(paint.blue, alone) : line(paint.vermillion, { dash: [8, 4], ...alone });
    };
    return {
      scales: { x: alongX, y: { range: () => range } }, axes: [place(), yAxis()],
      series: [{}, readingDots(panel), ...Array.from({ length: count }, predicted)],
      hooks: {
        draw: [bars(panel), crosses(panel)], drawClear: curved ? [smooth(panel)] : [],
        setCursor: answer ? [(u) => pointed(u, panel)] : [],
      },
    };
  };
  const drawReadings = () => {
    const host = open("readings", [["dot ink", "reading, bar ± 1 sd"], ["line blue", "response of the recovered source"], ...(data.panels.some(ringed) ? [["ring blue", "predicted, offsets included"]] : []),
      ...(data.panels.some((p) => p.off.length) ? [["cross grey", "not used"]] : [])]);
    if (!host) return;
    data.panels.forEach((panel, p) => {
      const range = padded([panel.value, panel.predicted, panel.curve || []]);
      chart(`readings${p}`, panelHost(host, label(panel.kind, panel.unit)), {
        high: 15, sync: true, plot: panelPlot(panel, range, true),
      }, [panel.x, panel.value, ...byGroup(panel, panel.predicted)]);
      const z = padded([panel.standardised, [-3, 3]], 0.02);
      chart(`residuals${p}`, panelHost(host, `residual / sd, ${panel.kind} (shaded: ± 2)`), {
        high: 8, sync: true, plot: {
          scales: { x: alongX, y: { range: () => z } }, axes: [place(), yAxis({ splits: sds })],
          series: [{}, readingDots(panel)],
          hooks: { drawClear: [expected], setCursor: [(u) => pointed(u, panel)] },
        },
      }, [panel.x, panel.standardised]);
    });
  };

  /* Strength: slider, source, fit and L-curve together. */
  const ladder = data.ladder, rungs = ladder.strengths.length;
  const cells = ladder.cells ? f32(ladder.cells) : new Float32Array();
  const fits = ladder.fits ? f32(ladder.fits) : new Float32Array();
  const perRung = rungs ? cells.length / rungs : 0;
  const column = new Map(ladder.rows.map((row, k) => [row, k]));
  let rung = ladder.start, controls = null;

  const rungCells = (k) => closed(cells.subarray(k * perRung, (k + 1) * perRung));
  const rungFit = (panel, k) => panel.rows.map((row) => {
    const c = column.get(row);
    return c === undefined || !fits.length ? null : fits[k * ladder.rows.length + c];
  });
  const nearest = (strengths, value) => {
    let best = 0;
    strengths.forEach((s, i) => {
      if (Math.abs(Math.log(s / value)) < Math.abs(Math.log(strengths[best] / value))) best = i;
    });
    return best;
  };
  const misfit = (k) => {
    let sum = 0, count = 0;
    for (const panel of data.panels) {
      rungFit(panel, k).forEach((v, i) => {
        const sd = panel.sd[i];
        if (v === null || panel.value[i] === null || !(sd > 0)) return;
        sum += ((panel.value[i] - v) / sd) ** 2;
        count += 1;
      });
    }
    return count ? Math.sqrt(sum / count) : null;
  };
  const sentence = (k) => {
    const unit = data.units.strength ? ` ${data.units.strength}` : "";
    const strength = pretty(ladder.labels[k]);
    const total = pretty(ladder.totals[k]);
    const off = misfit(k);
    const rough = off === null ? "" : ` Root mean square of residual / sd: ${show(off, 3)}.`;
    return `Strength ${strength}${unit} (rung ${k + 1} of ${rungs}): total ${total} ${data.units.total}. ` +
      `The answer: ${data.source.total}.${rough}`;
  };
  const letters = "abcdefghijklmnopqrstuvwxyz";
  /* Letters go beside their mark where no other letter or mark stands yet. */
  const AROUND = [[12, 0], [-12, 0], [0, -14], [0, 14], [12, -13], [-12, -13], [12, 13], [-12, 13],
    [0, -27], [0, 27], [14, -26], [-14, -26], [14, 26], [-14, 26], [0, -40], [0, 40]];
  const free = (taken, x, y) => taken.every(([a, b, r]) => Math.hypot(a - x, b - y) >= r * uPlot.pxRatio);
  const lMarks = (u) => {
    const c = ladder.curve, { ctx } = u, k = uPlot.pxRatio;
    const dot = (x, y, size, colour, filled) => {
      ctx.beginPath();
      ctx.arc(x, y, size * k, 0, 2 * Math.PI);
      ctx.lineWidth = 2.2 * k;
      ctx.strokeStyle = ctx.fillStyle = colour;
      if (filled) ctx.fill(); else ctx.stroke();
    };
    const spot = (strength) => {
      const at = nearest(c.strength, strength);
      return [u.valToPos(c.a[at], "x", true), u.valToPos(c.b[at], "y", true), 9];
    };
    ctx.save();
    ctx.font = `${0.8 * rem() * k}px ${getComputedStyle(document.body).fontFamily}`;
    ctx.textAlign = "center";
    ctx.textBaseline = "middle";
    const spots = ladder.marks.map((mark) => spot(mark.strength)), taken = [...spots];
    spots.forEach(([x, y], i) => {
      dot(x, y, 3, paint.ink, true);
      const [dx, dy] = AROUND.find(([a, b]) => free(taken, x + a * k, y + b * k)) || AROUND[0];
      taken.push([x + dx * k, y + dy * k, 12]);
      ctx.fillText(letters[i % 26], x + dx * k, y + dy * k);
    });
    if (rungs) {
      const [x, y] = spot(ladder.strengths[rung]);
      dot(x, y, 7, paint.vermillion, false);
    }
    ctx.restore();
  };
  const powers = (_, splits) => splits.map((v) => show(10 ** v, 2));
  const decades = (u, axis, low, high) => {
    const parts = high - low > 2.5 ? [1] : [1, 2, 5], out = [];
    for (let k = Math.floor(low); k <= Math.ceil(high); k += 1) {
      for (const part of parts) out.push(k + Math.log10(part));
    }
    return out.filter((v) => v >= low && v <= high);
  };

  const buildControls = (host) => {
    const input = make("input", { type: "range", id: "strength-slider", min: 0, max: rungs - 1, step: 1, value: rung });
    const output = make("output", { for: "strength-slider", "aria-live": "off" });
    const spoken = make("p", { class: "unseen", role: "status" });
    const choices = make("ul", { class: "choices", "aria-label": "Go to the choice of a criterion" });
    ladder.marks.forEach((mark, i) => {
      const button = make("button", { type: "button", "aria-pressed": "false" }, `${letters[i % 26]} ${mark.name}`);
      button.addEventListener("click", () => { input.value = nearest(ladder.strengths, mark.strength); moved(); });
      choices.append(make("li", {}, button));
    });
    let timer = 0;
    const moved = () => {
      step(Number(input.value));
      clearTimeout(timer);
      timer = setTimeout(() => { spoken.textContent = sentence(rung); }, 400);
    };
    input.addEventListener("input", moved);
    host.append(make("div", { class: "controls" },
      make("label", { for: "strength-slider" }, "Strength: weak on the left, strong on the right"),
      input, output, choices, spoken));
    controls = { input, output, buttons: [...choices.querySelectorAll("button")] };
  };
  const rungRange = () => {
    const [low, high] = sourceRange(), span = high - low;
    const [a, b] = padded([cells.subarray(rung * perRung, (rung + 1) * perRung)]);
    return [Math.max(Math.min(low, a), low - 1.5 * span), Math.min(Math.max(high, b), high + 1.5 * span)];
  };
  const step = (k) => {
    rung = k;
    const s = data.source;
    if (charts.rungSource) charts.rungSource.setData([s.edges, closed(s.estimate), rungCells(k)]);
    data.panels.forEach((panel, p) => {
      const plot = charts[`rungFit${p}`];
      if (plot) plot.setData([panel.x, panel.value, ...byGroup(panel, rungFit(panel, k))]);
    });
    if (charts.lcurve) charts.lcurve.redraw(false);
    controls.output.textContent = sentence(k);
    controls.input.setAttribute("aria-valuetext", `strength ${pretty(ladder.labels[k])}, total ${pretty(ladder.totals[k])} ${data.units.total}`);
    controls.buttons.forEach((button, i) => {
      button.setAttribute("aria-pressed", String(nearest(ladder.strengths, ladder.marks[i].strength) === k));
    });
  };
  const drawStrength = () => {
    const host = open("strength", null);
    if (!host) return;
    if (rungs && perRung === data.source.estimate.length) {
      buildControls(host);
      host.append(key([["line blue", "the answer"], ["dash vermillion", "this strength alone"], ["dot ink", "reading"]]));
      chart("rungSource", panelHost(host, sourceTitle()), {
        high: 14, sync: true, plot: {
          scales: { x: alongX, y: { range: rungRange } }, axes: [place(), yAxis()],
          series: [{}, stepped(paint.blue), stepped(paint.vermillion, { dash: [8, 4] })],
          hooks: { draw: [zoneMarks] },
        },
      }, [data.source.edges, closed(data.source.estimate), rungCells(rung)]);
      data.panels.forEach((panel, p) => {
        const range = padded([panel.value, panel.predicted], 0.15);
        chart(`rungFit${p}`, panelHost(host, label(panel.kind, panel.unit)), {
          high: 11, sync: true, plot: panelPlot(panel, range, false),
        }, [panel.x, panel.value, ...byGroup(panel, rungFit(panel, rung))]);
      });
    }
    const c = ladder.curve;
    if (!c.strength.length) return;
    const order = c.a.map((_, i) => i).sort((i, j) => c.a[i] - c.a[j]);
    const ranges = [padded([c.a]), padded([c.b])];
    host.append(key([["line blue", "every strength of the ladder"], ["ring vermillion", "the strength of the slider"],
      ["dot ink", "choice of a criterion: " + ladder.marks.map((m, i) => `${letters[i % 26]} ${m.name}`).join(", ")]]));
    chart("lcurve", panelHost(host, "norm of the roughness against norm of the residuals, both logarithmic"), {
      high: 18, plot: {
        scales: { x: { time: false, range: () => ranges[0] }, y: { range: () => ranges[1] } },
        axes: [xAxis("norm of the residuals", { values: powers, splits: decades }), yAxis({ values: powers, splits: decades })],
        series: [{}, line(paint.blue)], hooks: { draw: [lMarks] },
      },
    }, [order.map((i) => c.a[i]), order.map((i) => c.b[i])]);
    if (controls) step(rung);
  };

  /* Influence: the reading under the pointer, or the one chosen in the list. */
  const lines = data.influence.lines ? i16(data.influence.lines) : new Int16Array();
  const lineOf = new Map(data.influence.rows.map((row, k) => [row, k]));
  const home = new Map();
  data.panels.forEach((panel) => panel.rows.forEach((row, i) => home.set(row, [panel, i])));
  let picked = data.influence.rows.length ? data.influence.rows[0] : null, list = null;

  const influenceOf = (row) => {
    const k = lineOf.get(row), n = data.influence.x.length;
    return Array.from(lines.subarray(k * n, (k + 1) * n), (v) => v * data.influence.scale[k]);
  };
  const choose = (row) => {
    if (!lineOf.has(row) || !charts.influence || row === picked) return;
    picked = row;
    list.value = String(row);
    charts.influence.setData([data.influence.x, influenceOf(row)]);
    byId("influence-unit").textContent = influenceTitle();
  };
  const influenceTitle = () => {
    const [panel, i] = home.get(picked);
    return `change of the ${panel.kind} reading of line ${panel.line[i]} at x = ${show(panel.x[i])} ` +
      `${data.units.position} for a unit source [${data.influence.units[lineOf.get(picked)]}]`;
  };
  const drawInfluence = () => {
    const host = open("influence", null);
    if (!host) return;
    if (picked === null) { host.hidden = true; return; }
    list = make("select", { id: "influence-of" });
    data.panels.forEach((panel) => {
      const group = make("optgroup", { label: panel.kind });
      panel.rows.forEach((row, i) => {
        if (!lineOf.has(row)) return;
        const text = `line ${panel.line[i]}, x = ${show(panel.x[i])} ${data.units.position}`;
        group.append(make("option", { value: row }, text));
      });
      list.append(group);
    });
    list.value = String(picked);
    list.addEventListener("input", () => choose(Number(list.value)));
    host.append(make("div", { class: "controls" },
      make("label", { for: "influence-of" }, "Reading (or point at one in the charts above)"), list));
    const title = make("p", { class: "panel-title", id: "influence-unit", role: "status" }, influenceTitle());
    const area = make("div", { class: "plot", role: "img", "aria-labelledby": "influence-unit" });
    host.append(make("div", { class: "panel" }, title, area));
    chart("influence", area, {
      high: 14, sync: true, plot: {
        scales: { x: alongX, y: { range: (u, low, high) => padded([[low, high, 0]]) } }, axes: [place(), yAxis()],
        series: [{}, line(paint.ink)],
        hooks: { draw: [(u) => { const [panel, i] = home.get(picked); vertical(u, panel.x[i], paint.vermillion, [4, 3]); }] },
      },
    }, [data.influence.x, influenceOf(picked)]);
  };

  const drawAll = () => {
    for (const name of Object.keys(charts)) { charts[name].destroy(); delete charts[name]; }
    paint = colours();
    [drawSource, drawReadings, drawStrength, drawInfluence].forEach((draw) => draw());
  };

  /* Tables: sort by a heading, copy as CSV. */
  const quoted = (text) => (/[",\n\r]/.test(text) ? `"${text.replace(/"/g, '""')}"` : text);
  const cellText = (cell) => cell.dataset.v ?? cell.textContent.trim();
  const csv = (table) => [...table.rows].map((row) =>
    [...row.cells].map((c) => quoted(cellText(c))).join(",")).join("\n") + "\n";
  const sortBy = (table, index, head) => {
    const up = head.getAttribute("aria-sort") !== "ascending";
    for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
    head.setAttribute("aria-sort", up ? "ascending" : "descending");
    const keyed = [...table.tBodies[0].rows].map((row) => {
      const cell = row.cells[index], text = cellText(cell);
      const value = cell.dataset.v !== undefined ? Number(cell.dataset.v) : Number(text || NaN);
      return { row, text, value };
    });
    const sign = up ? 1 : -1;
    keyed.sort((a, b) => {
      const numbers = Number.isFinite(a.value) && Number.isFinite(b.value);
      if (numbers) return sign * (a.value - b.value);
      if (Number.isFinite(a.value) !== Number.isFinite(b.value)) return Number.isFinite(a.value) ? -1 : 1;
      return sign * (a.text < b.text ? -1 : a.text > b.text ? 1 : 0);
    });
    table.tBodies[0].append(...keyed.map((k) => k.row));
  };
  const copy = async (text) => {
    try {
      await navigator.clipboard.writeText(text);
      return true;
    } catch {
      const area = make("textarea", { "aria-hidden": "true", tabindex: "-1" });
      area.value = text;
      document.body.append(area);
      area.select();
      const done = document.execCommand("copy");
      area.remove();
      return done;
    }
  };
  const equipTable = (table) => {
    [...table.tHead.rows[0].cells].forEach((head, index) => {
      const button = make("button", { type: "button" }, head.textContent);
      button.addEventListener("click", () => sortBy(table, index, head));
      head.replaceChildren(button);
    });
    const button = make("button", { type: "button" }, "Copy as CSV",
      make("span", { class: "unseen" }, `: ${table.caption.textContent}`));
    const said = make("span", { role: "status" });
    button.addEventListener("click", async () => {
      said.textContent = (await copy(csv(table))) ? " copied" : " the browser did not allow it";
    });
    table.parentElement.after(make("p", { class: "tools" }, button, said));
  };

  /* The drawing itself as a file, with colours that stand alone. */
  const equipFigure = (figure) => {
    const svg = figure.querySelector("svg.drawn"), get = figure.querySelector(".get");
    if (!svg || !get) return;
    const button = make("button", { type: "button" }, "SVG",
      make("span", { class: "unseen" }, ` of the figure ${svg.dataset.figure}`));
    button.addEventListener("click", () => {
      const text = new XMLSerializer().serializeToString(svg)
        .replace(/var\(--[a-z]+,\s*(#[0-9a-f]{6})\)/g, "$1");
      const url = URL.createObjectURL(new Blob([text], { type: "image/svg+xml" }));
      make("a", { href: url, download: svg.dataset.figure + ".svg" }).click();
      setTimeout(() => URL.revokeObjectURL(url), 1000);
    });
    get.append(button);
  };

  const start = () => {
    root.classList.add("scripted");
    drawAll();
    document.querySelectorAll("table.data").forEach(equipTable);
    document.querySelectorAll("figure").forEach(equipFigure);
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", drawAll);
    let width = 0;
    new ResizeObserver(() => {
      if (document.body.clientWidth === width) return;
      width = document.body.clientWidth;
      Object.values(charts).forEach((plot) => plot.fit());
    }).observe(document.body);
    root.dataset.ready = "yes";
  };
  window.report = { charts, csv: (id) => csv(byId(id)), data };
  requestAnimationFrame(() => setTimeout(start, 0));
})();
