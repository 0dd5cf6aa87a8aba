"use strict";
(() => {
  // Inside the hidden frame by which an open page looks for news: hand over the data, do no more.
  const source = document.getElementById("data").textContent;
  if (window.parent !== window && location.hash === "#feed") {
    window.parent.postMessage({ scatterfit: source }, "*");
    return;
  }

  const $ = (id) => document.getElementById(id);
  const TONES = ["var(--accepted)", "var(--ambiguous)", "var(--rejected)", "var(--failed)"];
  const INKS = ["#0072b2", "#b37700", "#c04a00", "#1a1a1a"];
  const FAINT = "#9aa0a8";
  let data, order = [], shown = [], page = 0, current = -1;
  const state = { sort: "trace", down: false };

  // Numbers: two digits of uncertainty, the value to the same decimal.
  const SUPER = { "-": "⁻", 0: "⁰", 1: "¹", 2: "²", 3: "³", 4: "⁴", 5: "⁵", 6: "⁶", 7: "⁷", 8: "⁸", 9: "⁹" };
  const raised = (power) => String(power).replace(/[-0-9]/g, (c) => SUPER[c]);
  const exponent = (value) => Number(value.toExponential(15).split("e")[1]);
  function rounded(value, place) {
    // Decimal arithmetic on the shortest text of the number, halves away from zero.
    const [digits, power] = Math.abs(value).toExponential().split("e");
    const all = BigInt(digits.replace(".", ""));
    const shift = Number(power) - (digits.length > 1 ? digits.length - 2 : 0) - place;
    let units;
    if (shift >= 0) units = all * 10n ** BigInt(shift);
    else {
      const step = 10n ** BigInt(-shift);
      units = (all + step / 2n) / step;
    }
    return { units, place, negative: value < 0 && units > 0n };
  }
  function plainText({ units, place, negative }) {
    let text = String(units);
    if (place >= 0) text += units === 0n ? "" : "0".repeat(place);
    else {
      text = text.padStart(1 - place, "0");
      text = `${text.slice(0, place)}.${text.slice(place)}`;
    }
    return negative ? `-${text}` : text;
  }
  const adjusted = ({ units, place }) => (units === 0n ? -Infinity : String(units).length - 1 + place);
  function quantity(value, sigma, unit = "") {
    if (value === null || value === undefined) return "";
    const spaced = unit ? ` ${unit}` : "";
    if (sigma === null || sigma === undefined) return number(value) + spaced;
    if (sigma === 0) return `${number(value, 5)}${spaced} (no sigma stated)`;
    return digitsOf(value, sigma) + spaced;
  }
  function digitsOf(value, sigma) {
    let place = exponent(sigma) - 1;
    if (adjusted(rounded(sigma, place)) > exponent(sigma)) place += 1;
    const power = Math.max(adjusted(rounded(value, place)), adjusted(rounded(sigma, place)));
    if (place < 2 && power > -4 && power < 5) {
      return `${plainText(rounded(value, place))} ± ${plainText(rounded(sigma, place))}`;
    }
    const scaled = (part) => plainText({ ...rounded(part, place), place: place - power });
    return `(${scaled(value)} ± ${scaled(sigma)})×10${raised(power)}`;
  }
  function number(value, digits = 4) {
    if (value === null || value === undefined) return "";
    if (value === 0) return "0";
    const kept = rounded(value, exponent(value) - digits + 1);
    const power = adjusted(kept);
    const trimmed = (text) => (text.includes(".") ? text.replace(/\.?0+$/, "") : text);
    if (power > -4 && power < 5) return trimmed(plainText(kept));
    return `${trimmed(plainText({ ...kept, place: kept.place - power }))}×10${raised(power)}`;
  }

  // Small helpers for the document; text goes in as text, never as markup.
  function make(tag, attributes = {}, ...children) {
    const node = document.createElement(tag);
    for (const [name, value] of Object.entries(attributes)) {
      if (name === "class") node.className = value;
      else if (name.startsWith("on")) node.addEventListener(name.slice(2), value);
      else if (value !== null) node.setAttribute(name, value);
    }
    node.append(...children);
    return node;
  }
  function sharp(canvas) {
    const scale = window.devicePixelRatio || 1;
    const width = canvas.clientWidth || Number(canvas.dataset.width) || 150;
    const height = canvas.clientHeight || Number(canvas.dataset.height) || 74;
    canvas.width = Math.round(width * scale);
    canvas.height = Math.round(height * scale);
    const pen = canvas.getContext("2d");
    pen.scale(scale, scale);
    return [pen, width, height];
  }
  function mark(pen, kind, x, y, r) {
    pen.beginPath();
    if (kind === 0) pen.arc(x, y, r, 0, 7);
    else if (kind === 1) { pen.moveTo(x, y - r * 1.3); pen.lineTo(x + r * 1.2, y + r); pen.lineTo(x - r * 1.2, y + r); pen.closePath(); }
    else if (kind === 2) pen.rect(x - r, y - r, 2 * r, 2 * r);
    else { pen.moveTo(x - r, y - r); pen.lineTo(x + r, y + r); pen.moveTo(x + r, y - r); pen.lineTo(x - r, y + r); }
    pen.strokeStyle = pen.fillStyle = INKS[kind];
    if (kind === 0 || kind === 1) pen.fill(); else pen.stroke();
  }
  const GLYPHS = ["●", "▲", "□", "✕"];
  const symbol = (kind) => make("span", { class: `glyph v${kind}`, "aria-hidden": "true" }, GLYPHS[kind]);
  const verdictName = (i) => data.verdicts[data.verdict[i]];
  const value = (key, i) => (data.values[key] ? data.values[key][i] : null);
  const sigma = (key, i) => (data.sigmas[key] ? data.sigmas[key][i] : null);
  const plural = (n, noun) => `${n.toLocaleString("en")} ${noun}${n === 1 ? "" : "s"}`;
  const when = (seconds) => (seconds === null ? "" : new Date(seconds * 1000).toISOString().slice(0, 19).replace("T", " "));
  const unitText = (unit) => (unit ? ` [${unit}]` : "");

  const watcher = new IntersectionObserver((entries) => {
    for (const { isIntersecting, target } of entries) if (isIntersecting) (target.plot ? drawPlot : draw)(target);
  }, { rootMargin: "400px" });

  // Overview
  function overview() {
    document.title = data.title;
    $("title").textContent = data.title;
    $("summary").textContent = data.summary;
    const counts = data.verdicts.map((_, k) => data.verdict.filter((v) => v === k).length);
    $("verdicts").replaceChildren(...data.verdicts.map((name, k) => {
      const share = data.trace.length ? Math.round((100 * counts[k]) / data.trace.length) : 0;
      return make("div", { class: "tile", style: `--tone: ${TONES[k]}` }, symbol(k), ` ${name}`,
        make("b", {}, counts[k].toLocaleString("en")), `${share} %`);
    }));
    const rows = data.codes.map((code) => make("tr", {},
      make("td", { class: "n" }, String(code.count)), make("th", { scope: "row" }, code.code),
      make("td", {}, code.example)));
    $("codes").replaceChildren(...(rows.length ? [make("h3", {}, "Reasons, with an example of each"),
      make("table", {}, make("tbody", {}, ...rows))] : []));
    $("legend").replaceChildren(...data.verdicts.slice(0, 3).map((name, k) => make("li", {}, symbol(k), name)));
    $("axis-hint").textContent = data.axis_hint;
    $("drift").hidden = !data.drift_text;
    $("drift").textContent = data.drift_text;
  }

  // Plots through the night
  function plots() {
    $("plots").replaceChildren(...data.plots.map((plot) => {
      const canvas = make("canvas", { tabindex: "0", role: "img", "aria-label":
        `${plot.label} through the night; arrow keys step through the pulses, Enter opens one` });
      const figure = make("figure", {}, make("figcaption", {}, plot.label + unitText(plot.unit)), canvas);
      canvas.plot = plot;
      canvas.addEventListener("focus", () => drawPlot(canvas));
      canvas.addEventListener("keydown", (event) => step(canvas, event));
      canvas.addEventListener("blur", () => { canvas.at = null; tip(""); drawPlot(canvas); });
      canvas.addEventListener("mousemove", (event) => hover(canvas, event));
      canvas.addEventListener("mouseleave", () => tip(""));
      canvas.addEventListener("click", () => { if (canvas.at !== null) open(canvas.at); });
      return figure;
    }));
    document.querySelectorAll("#plots canvas").forEach((canvas) => watcher.observe(canvas));
  }
  function ticks(low, high, count) {
    const raw = (high - low) / count, base = 10 ** Math.floor(Math.log10(raw));
    const stepSize = [1, 2, 5, 10].map((m) => m * base).find((s) => s >= raw);
    const list = [];
    for (let t = Math.ceil(low / stepSize) * stepSize; t <= high + 1e-9 * stepSize; t += stepSize) list.push(t);
    return list;
  }
  function drawPlot(canvas) {
    const plot = canvas.plot, [pen, width, height] = sharp(canvas);
    const x = data.place, y = data.values[plot.key], s = data.sigmas[plot.key];
    const scale = plot.log ? Math.log10 : (v) => v;
    const points = [];
    for (let i = 0; i < x.length; i += 1) if (y[i] !== null && !data.excluded[i] && (!plot.log || y[i] > 0)) points.push(i);
    const ys = points.map((i) => scale(y[i])).sort((a, b) => a - b);
    const cut = Math.floor(ys.length * 0.002);
    let low = ys[cut], high = ys[ys.length - 1 - cut];
    if (!(high > low)) { const half = Math.abs(low) * 0.01 || 1; low -= half; high += half; }
    const pad = 0.08 * (high - low);
    low -= pad; high += pad;
    const left = 62, right = width - 18, top = 6, bottom = height - 22;
    const px = (v) => left + ((v - data.place_low) / (data.place_high - data.place_low || 1)) * (right - left);
    const py = (v) => bottom - ((Math.min(Math.max(scale(v), low), high) - low) / (high - low)) * (bottom - top);
    pen.font = "11px system-ui, sans-serif";
    pen.fillStyle = "#555"; pen.strokeStyle = "#e1e3e6"; pen.lineWidth = 1;
    pen.textAlign = "right"; pen.textBaseline = "middle";
    for (const t of ticks(low, high, 4)) {
      const at = bottom - ((t - low) / (high - low)) * (bottom - top);
      pen.beginPath(); pen.moveTo(left, at); pen.lineTo(right, at); pen.stroke();
      const power = Number(t.toPrecision(6));
      pen.fillText(plot.log ? (Number.isInteger(power) ? `10${raised(power)}` : number(10 ** t, 2)) : number(Number(t.toPrecision(6)), 6), left - 4, at);
    }
    pen.textAlign = "center"; pen.textBaseline = "top";
    for (const [place, text] of data.place_ticks) pen.fillText(text, px(place), bottom + 5);
    if (points.length <= 400) {
      pen.strokeStyle = "#b9bdc4";
      for (const i of points) if (s[i] !== null) {
        pen.beginPath(); pen.moveTo(px(x[i]), py(y[i] - s[i])); pen.lineTo(px(x[i]), py(y[i] + s[i])); pen.stroke();
      }
    }
    pen.globalAlpha = points.length > 1000 ? 0.45 : 0.85;
    const size = points.length > 1000 ? 1.6 : 2.6;
    pen.lineWidth = 1.2;
    if (points.length > 1000) {
      pen.fillStyle = INKS[0];
      for (const i of points) if (data.verdict[i] === 0) pen.fillRect(px(x[i]) - size, py(y[i]) - size, 2 * size, 2 * size);
      for (const i of points) if (data.verdict[i] !== 0) mark(pen, data.verdict[i], px(x[i]), py(y[i]), size + 0.8);
    } else for (const i of points) mark(pen, data.verdict[i], px(x[i]), py(y[i]), size);
    pen.globalAlpha = 1;
    if (plot.level.length) {
      pen.strokeStyle = "#000"; pen.lineWidth = 1.8; pen.beginPath();
      plot.level.forEach(([at, level], k) => pen[k ? "lineTo" : "moveTo"](px(at), py(level)));
      pen.stroke();
    }
    if (canvas.at !== null && canvas.at !== undefined && y[canvas.at] !== null) {
      pen.strokeStyle = "#000"; pen.lineWidth = 1.5; pen.beginPath();
      pen.arc(px(x[canvas.at]), py(y[canvas.at]), 7, 0, 7); pen.stroke();
    }
    canvas.points = points;
    canvas.where = (i) => [px(x[i]), py(y[i])];
  }
  function told(canvas, i) {
    const { key, label, unit } = canvas.plot;
    return `${data.trace[i]}: ${label} ${quantity(value(key, i), sigma(key, i), unit)}, ${verdictName(i)}`;
  }
  function step(canvas, event) {
    const by = { ArrowRight: 1, ArrowLeft: -1, PageDown: 20, PageUp: -20, Home: -1e9, End: 1e9 }[event.key];
    if (event.key === "Enter" && canvas.at !== null && canvas.at !== undefined) open(canvas.at);
    if (!by || !canvas.points.length) return;
    event.preventDefault();
    const inOrder = [...canvas.points].sort((a, b) => data.place[a] - data.place[b]);
    const at = canvas.at === null || canvas.at === undefined ? (by > 0 ? -1 : inOrder.length) : inOrder.indexOf(canvas.at);
    canvas.at = inOrder[Math.min(Math.max(at + by, 0), inOrder.length - 1)];
    drawPlot(canvas);
    tip(told(canvas, canvas.at));
  }
  function hover(canvas, event) {
    const box = canvas.getBoundingClientRect(), mx = event.clientX - box.left, my = event.clientY - box.top;
    let best = null, least = 144;
    for (const i of canvas.points) {
      const [x, y] = canvas.where(i), far = (x - mx) ** 2 + (y - my) ** 2;
      if (far < least) { least = far; best = i; }
    }
    canvas.at = best;
    tip(best === null ? "" : told(canvas, best));
  }
  function tip(text) { $("tip").textContent = text; $("tip").hidden = !text; }

  // Traces
  const decode = (text) => Uint8Array.from(atob(text), (c) => c.charCodeAt(0));
  function drawTrace(canvas, i, large) {
    const [pen, width, height] = sharp(canvas), channels = data.thumbs[i];
    if (!channels.length) {
      pen.fillStyle = FAINT; pen.font = "12px system-ui, sans-serif"; pen.textAlign = "center";
      pen.fillText("no trace kept", width / 2, height / 2);
      return;
    }
    const left = large ? 64 : 1, foot = large ? 22 : 1, gap = large ? 14 : 3;
    const band = (height - foot - gap * (channels.length - 1)) / channels.length;
    channels.forEach((channel, k) => {
      const top = k * (band + gap), signal = decode(channel.s), fit = decode(channel.f), n = signal.length;
      const at = channel.x ? decode(channel.x) : null;
      const px = (j) => left + ((at ? at[j] / 254 : n > 1 ? j / (n - 1) : 0) * (width - left - 3)) + 1;
      const py = (v) => top + band - 2 - (v / 254) * (band - 4);
      pen.fillStyle = large ? "#7d8ba0" : "#93a4bd";
      const dot = large ? 2.2 : 1.3;
      for (let j = 0; j < n; j += 1) if (signal[j] < 255) pen.fillRect(px(j) - dot / 2, py(signal[j]) - dot / 2, dot, dot);
      pen.strokeStyle = "#000"; pen.lineWidth = large ? 1.3 : 1; pen.beginPath();
      let down = false;
      for (let j = 0; j < n; j += 1) {
        if (fit[j] === 255) { down = false; continue; }
        pen[down ? "lineTo" : "moveTo"](px(j), py(fit[j]));
        down = true;
      }
      pen.stroke();
      if (!large) return;
      pen.strokeStyle = "#c9ccd1"; pen.lineWidth = 1; pen.strokeRect(left - 0.5, top + 0.5, width - left - 1, band - 1);
      pen.fillStyle = "#333"; pen.font = "12px system-ui, sans-serif"; pen.textAlign = "right";
      pen.fillText(`${number(channel.hi, 3)} V`, left - 5, top + 12);
      pen.fillText(`${number(channel.lo, 3)} V`, left - 5, top + band - 4);
      pen.textAlign = "left";
      pen.fillText(channel.l, left + 6, top + 14);
    });
    if (large) {
      const [from, to] = data.spans[i];
      pen.fillStyle = "#333"; pen.font = "12px system-ui, sans-serif"; pen.textAlign = "left";
      pen.fillText(`${number(from)} ms`, left, height - 6);
      pen.textAlign = "right"; pen.fillText(`${number(to)} ms`, width - 3, height - 6);
      pen.textAlign = "center"; pen.fillText("time; dots measured, line fitted", (left + width) / 2, height - 6);
    }
  }
  function draw(button) {
    if (button.drawn) return;
    button.drawn = true;
    drawTrace(button.firstChild, button.pulse, false);
  }
  let thumbs = [];
  function thumb(i) {
    if (thumbs[i]) return thumbs[i];
    const text = value("final_radius_um", i) === null ? data.reasons[i].map(([code]) => data.codes[code].code).join(", ") || verdictName(i)
      : `${number(value("final_radius_um", i))} µm`;
    const button = make("button", { type: "button", class: "thumb", style: `--tone: ${TONES[data.verdict[i]]}`,
      "aria-label": `${data.trace[i]}, ${verdictName(i)}`, onclick: () => open(i) },
      make("canvas", { "aria-hidden": "true" }), make("span", {}, data.trace[i]), make("span", {}, `${verdictName(i)} ${text}`));
    button.pulse = i;
    thumbs[i] = button;
    watcher.observe(button);
    return button;
  }
  function notable() {
    $("worst").replaceChildren(...data.worst.map((i) => {
      const button = make("button", { type: "button", class: "thumb", style: `--tone: ${TONES[data.verdict[i]]}`, onclick: () => open(i) },
        make("canvas", { "aria-hidden": "true" }), make("span", {}, data.trace[i]),
        make("span", {}, `chi² ${number(value("chi2_reduced", i), 3)}, ${verdictName(i)}`));
      button.pulse = i;
      watcher.observe(button);
      return button;
    }));
    if (!data.worst.length) $("worst").replaceChildren(make("p", {}, "None."));
    $("outliers").replaceChildren(...data.outliers.map(([i, text]) => make("li", {},
      make("button", { type: "button", class: "open", onclick: () => open(i) }, data.trace[i]), ` ${text}`)));
    if (!data.outliers.length) $("outliers").replaceChildren(make("li", {}, "None."));
    $("excluded-part").hidden = !data.exclusions.length;
    $("excluded").replaceChildren(...data.exclusions.map((text) => make("li", {}, text)));
  }

  // Table
  const MORE = [{ key: "trace", label: "trace" }, { key: "verdict", label: "verdict" }, { key: "reasons", label: "reasons" }];
  const heads = () => [...MORE, ...data.columns, { key: "recorded", label: "recorded", unit: "UTC" }];
  function sortKey(key) {
    if (key === "trace") return (i) => data.trace[i];
    if (key === "verdict") return (i) => data.verdict[i];
    if (key === "reasons") return (i) => data.reasons[i].map(([code]) => data.codes[code].code).join(" ") || null;
    if (key === "recorded") return (i) => data.recorded[i];
    return (i) => value(key, i);
  }
  const words = new Intl.Collator("en", { numeric: true });
  function sort() {
    const key = sortKey(state.sort), sign = state.down ? -1 : 1;
    const keys = data.trace.map((_, i) => key(i));
    const textual = state.sort === "trace" || state.sort === "reasons";
    order = keys.map((_, i) => i).sort((a, b) => {
      const p = keys[a], q = keys[b];
      if (p === null || q === null) return (p === null) - (q === null) || a - b; // empty ones last
      const way = textual ? words.compare(p, q) : p - q;
      return sign * way || a - b;
    });
  }
  function filter() {
    const text = $("find").value.trim().toLowerCase(), code = $("by-code").value, column = $("by-column").value;
    const low = $("low").value === "" ? -Infinity : Number($("low").value);
    const high = $("high").value === "" ? Infinity : Number($("high").value);
    const wanted = new Set([...document.querySelectorAll("#by-verdict input:checked")].map((box) => Number(box.value)));
    shown = order.filter((i) => {
      if (!wanted.has(data.verdict[i])) return false;
      if (text && !data.trace[i].toLowerCase().includes(text)
        && !data.reasons[i].some(([c, t]) => data.codes[c].code.includes(text) || t.toLowerCase().includes(text))) return false;
      if (code && !data.reasons[i].some(([c]) => data.codes[c].code === code)) return false;
      if (column) {
        const v = value(column, i);
        if (v === null || v < low || v > high) return false;
      }
      return true;
    });
    const all = data.trace.length;
    $("count").textContent = shown.length === all ? plural(all, "pulse") : `${shown.length.toLocaleString("en")} of ${plural(all, "pulse")}`;
  }
  function head() {
    $("head").replaceChildren(...heads().map(({ key, label, unit }) => {
      const here = state.sort === key, arrow = here ? (state.down ? " ▼" : " ▲") : "";
      return make("th", { scope: "col", class: MORE.some((m) => m.key === key) ? "" : "num", "aria-sort": here ? (state.down ? "descending" : "ascending") : "none" },
        make("button", { type: "button", "data-key": key, onclick: () => by(key) }, label + arrow, make("small", {}, unit || "")));
    }));
  }
  function by(key) {
    state.down = state.sort === key ? !state.down : key === "chi2_reduced";
    state.sort = key;
    page = 0;
    refresh();
    document.querySelector(`#head [data-key="${key}"]`).focus();
  }
  function row(i) {
    const verdict = data.verdict[i];
    const cells = data.columns.map(({ key }) => make("td", { class: "num" }, quantity(value(key, i), sigma(key, i) || null)));
    return make("tr", { class: data.excluded[i] ? "out" : "" },
      make("td", { class: "long" }, make("button", { type: "button", class: "open", onclick: () => open(i) }, data.trace[i])),
      make("td", { class: "verdict" }, symbol(verdict), data.verdicts[verdict], ...(data.excluded[i] ? [" (excluded)"] : [])),
      make("td", { class: "long" }, data.reasons[i].map(([code]) => data.codes[code].code).join(", ")),
      ...cells, make("td", { class: "num" }, when(data.recorded[i])));
  }
  function rows(all) {
    const size = all ? Infinity : Number($("page-size").value), pages = Math.max(1, Math.ceil(shown.length / size));
    page = Math.min(Math.max(page, 0), pages - 1);
    const part = all ? shown : shown.slice(page * size, (page + 1) * size);
    $("rows").replaceChildren(...part.map(row));
    $("page-number").textContent = `page ${page + 1} of ${pages}`;
    $("before").disabled = page === 0;
    $("after").disabled = page >= pages - 1;
  }
  let contactTimer = 0;
  function contact() {
    clearTimeout(contactTimer);
    contactTimer = setTimeout(fillContact, 60);
  }
  function fillContact() { $("contact").replaceChildren(...shown.map(thumb)); }
  function refresh() {
    sort(); filter(); head(); rows(); contact(); remember();
  }

  // One pulse
  function open(i) {
    current = i;
    $("detail-title").textContent = data.trace[i];
    const said = data.reasons[i].map(([code, text]) => make("li", {}, `${data.codes[code].code}: ${text}`));
    const out = data.excluded[i];
    $("detail-reasons").replaceChildren(make("p", { class: "verdict" }, symbol(data.verdict[i]), verdictName(i)),
      ...(said.length ? [make("ul", {}, ...said)] : []), ...(out ? [make("p", { class: "note" }, `excluded by ${out[0]}: ${out[1]}`)] : []));
    const list = Object.keys(data.values).filter((key) => value(key, i) !== null).map((key) => make("tr", {},
      make("th", { scope: "row" }, data.labels[key]), make("td", {}, quantity(value(key, i), sigma(key, i), data.units[key]))));
    $("detail-values").tBodies[0].replaceChildren(...list);
    $("detail-hint").textContent = `The full figure: ${data.show_command} ${data.shell_names[i] || data.trace[i]}`;
    if (!$("detail").open) $("detail").showModal();
    drawTrace($("detail-plot"), i, true);
    const at = shown.indexOf(i);
    $("detail-before").disabled = at <= 0;
    $("detail-after").disabled = at < 0 || at >= shown.length - 1;
  }
  function neighbour(by) {
    const at = shown.indexOf(current) + by;
    if (shown.indexOf(current) >= 0 && at >= 0 && at < shown.length) open(shown[at]);
  }

  // Provenance
  function provenance() {
    $("facts").replaceChildren(...data.facts.flatMap(([name, text]) => [make("dt", {}, name), make("dd", {}, text)]));
    $("chambers").replaceChildren(...data.chambers.flatMap(({ name, sha256, text }) => [
      make("h3", {}, `Chamber file ${name}`), make("p", { class: "hint" }, `SHA-256 ${sha256}`), make("pre", { tabindex: "0" }, text)]));
  }

  // The reader's choices live in the address, so that they outlast a reload.
  function remember() {
    const kept = new URLSearchParams();
    if (state.sort !== "trace" || state.down) kept.set("sort", (state.down ? "-" : "") + state.sort);
    for (const id of ["find", "by-code", "by-column", "low", "high"]) if ($(id).value) kept.set(id, $(id).value);
    const off = [...document.querySelectorAll("#by-verdict input:not(:checked)")].map((box) => box.value);
    if (off.length) kept.set("without", off.join(" "));
    if (page) kept.set("page", String(page));
    if ($("page-size").value !== "100") kept.set("rows", $("page-size").value);
    if (!kept.size && !location.hash.includes("=")) return;
    try { history.replaceState(null, "", `#${kept}`); } catch { /* some browsers forbid it for files */ }
  }
  function recall() {
    if (!location.hash.includes("=")) return;
    const kept = new URLSearchParams(location.hash.slice(1));
    const by = kept.get("sort") || "trace";
    state.down = by.startsWith("-");
    state.sort = heads().some(({ key }) => key === by.replace("-", "")) ? by.replace("-", "") : "trace";
    for (const id of ["find", "by-code", "by-column", "low", "high"]) $(id).value = kept.get(id) || "";
    const off = (kept.get("without") || "").split(" ");
    document.querySelectorAll("#by-verdict input").forEach((box) => { box.checked = !off.includes(box.value); });
    if (kept.get("rows")) $("page-size").value = kept.get("rows");
    page = Number(kept.get("page")) || 0;
  }

  function options() {
    const keep = (select, list) => {
      const before = select.value;
      select.replaceChildren(select.options[0], ...list.map(([key, text]) => make("option", { value: key }, text)));
      select.value = list.some(([key]) => key === before) ? before : "";
    };
    keep($("by-code"), data.codes.map(({ code, count }) => [code, `${code} (${count})`]));
    keep($("by-column"), data.columns.map(({ key, label, unit }) => [key, label + unitText(unit)]));
    if ($("by-verdict").children.length === 1) {
      $("by-verdict").append(...data.verdicts.map((name, k) => make("label", {}, make("input", { type: "checkbox", value: k, checked: "" }), ` ${name}`)));
    }
  }
  function show(text) {
    data = JSON.parse(text);
    thumbs = [];
    overview(); plots(); notable(); options(); provenance();
  }

  show(source);
  recall();
  refresh();
  let typing = 0;
  $("filters").addEventListener("input", () => {
    clearTimeout(typing);
    typing = setTimeout(() => { page = 0; refresh(); }, 120);
  });
  $("filters").addEventListener("submit", (event) => event.preventDefault());
  $("clear").addEventListener("click", () => { $("filters").reset(); page = 0; refresh(); });
  $("before").addEventListener("click", () => { page -= 1; rows(); remember(); });
  $("after").addEventListener("click", () => { page += 1; rows(); remember(); });
  $("page-size").addEventListener("change", () => { page = 0; rows(); remember(); });
  $("detail-close").addEventListener("click", () => $("detail").close());
  $("detail-before").addEventListener("click", () => neighbour(-1));
  $("detail-after").addEventListener("click", () => neighbour(1));
  $("detail").addEventListener("keydown", (event) => {
    if (event.key === "ArrowLeft") neighbour(-1);
    if (event.key === "ArrowRight") neighbour(1);
  });
  let width = window.innerWidth;
  window.addEventListener("resize", () => {
    if (window.innerWidth === width) return;
    width = window.innerWidth;
    document.querySelectorAll("#plots canvas").forEach(drawPlot);
    document.querySelectorAll(".thumb").forEach((button) => { button.drawn = false; watcher.unobserve(button); watcher.observe(button); });
    if ($("detail").open) drawTrace($("detail-plot"), current, true);
  });
  window.addEventListener("beforeprint", () => {
    rows(true);
    document.querySelectorAll("#plots canvas").forEach(drawPlot);
    fillContact();
    document.querySelectorAll(".thumb").forEach(draw);
  });
  window.addEventListener("afterprint", () => rows());

  // While a watch keeps this file up to date: look for news in a hidden frame, and take them in
  // without a reload, so that sort, filters, place and the open pulse stay.
  if (data.live_seconds) {
    let frame = null;
    window.addEventListener("message", (event) => {
      if (!frame || event.source !== frame.contentWindow || typeof event.data?.scatterfit !== "string") return;
      const news = event.data.scatterfit;
      frame.remove(); frame = null;
      const isNew = news !== window.scatterfitShown;
      if (isNew) {
        window.scatterfitShown = news;
        const name = current >= 0 ? data.trace[current] : null, top = window.scrollY;
        show(news);
        refresh();
        window.scrollTo({ top, behavior: "instant" });
        if (name !== null) current = data.trace.indexOf(name);
        if ($("detail").open && current >= 0) open(current);
      }
      if (data.live_seconds) setTimeout(look, 1000 * data.live_seconds);
    });
    const look = () => {
      if (frame) frame.remove();
      frame = make("iframe", { hidden: "", title: "news", src: `${location.href.split(/[?#]/)[0]}?${Date.now()}#feed` });
      document.body.append(frame);
    };
    window.scatterfitShown = source;
    setTimeout(look, 1000 * data.live_seconds);
    setInterval(() => { if (frame && data.live_seconds) look(); }, 10000 + 3000 * data.live_seconds);
  }
  window.scatterfit = { quantity, number };
})();
