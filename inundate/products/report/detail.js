"use strict";
/* All that is known of one wetland. */
const Details = {
  marker: [], wetland: null,
  frame(w) {
    const figure = (id, words, kind) => el("figure", { class: "card" }, el("figcaption", { text: words }), el("div", { id, class: `chart ${kind}` }));
    const series = figure("d-series", "Inundated area: middle estimate, 90 % interval, and what scenes showed by leaf state (filled marks are used, hollow marks are set aside)", "tall");
    series.append(el("p", { id: "d-day", class: "readout", "aria-live": "polite" }));
    const box = el("div", {}, this.facts(w), series);
    if (w.series.stage) box.append(el("br"), figure("d-stage", "Stage by the wetland's loggers, with two standard deviations", "low"));
    const pair = el("div", { class: "pair", style: "margin-top:1.1rem" }, figure("d-relation", this.relationWords(w), "tall"));
    pair.append(w.loggers.length ? this.loggerCard(w) : el("div", { class: "card" }, el("h3", { text: "Logger record" }), el("p", { text: "No logger record is kept for this wetland." })));
    box.append(pair, this.shots(w), this.years(w));
    return box;
  },
  facts(w) {
    const words = [`${w.cover || "cover not known"}, largest extent ${area(w.areaMax)}.`];
    if (w.why) words.push(`How days without a view were filled: ${w.why}${/[.!?]$/.test(w.why) ? "" : "."}`);
    if (w.changedDays) words.push(`${w.changedDays} days moved since the last delivery.`);
    const box = el("div", {}, el("p", { id: "d-facts", text: words.join(" ") }));
    if (w.shifts.length) box.append(el("ul", {}, ...w.shifts.map((text) => el("li", { text }))));
    return box;
  },
  relationWords(w) {
    const r = w.relation;
    if (!r) return "Stage-area relation";
    const range = finite(r.from) ? `, stages seen ${fixed(r.from, 2)} to ${fixed(r.to, 2)} m` : "";
    const error = finite(r.rmse) ? `, held-out RMSE ${area(r.rmse)}` : "";
    return `Stage-area relation: ${r.family}, ${r.n} pairs${range}${error}${r.pooled ? ", leaning on the other wetlands" : ""}`;
  },
  loggerCard(w) {
    const card = el("figure", { class: "card" }, el("figcaption", { text: "Logger record: level as read, stage made of it, field checks, readings left out" }));
    w.loggers.forEach((one, k) => {
      card.append(el("h3", { text: `Logger ${one.logger}` }), el("div", { id: `d-logger${k}`, class: "chart" }));
      if (one.corrections?.length) {
        const list = one.corrections.map((c) => el("li", { text: `${c.kind.replaceAll("_", " ")}, ${c.n} time${c.n === 1 ? "" : "s"}${finite(c.largest) ? `, up to ${fixed(100 * c.largest, 1)} cm` : ""}: ${c.why}` }));
        card.append(el("details", {}, el("summary", { text: "What was corrected, and why" }), el("ul", { class: "plain" }, ...list)));
      }
    });
    return card;
  },
  shots(w) {
    const card = el("div", { class: "card" }, el("h3", { text: "The wetland in its scenes" }));
    if (!w.pictures.length) { card.append(el("p", { text: "No picture: the wetland has no used view, or its views are no longer in the archive." })); return card; }
    const images = [];
    const switchTo = (kind) => images.forEach(([img, p]) => { img.src = p[kind]; });
    const radio = (kind, words, on) => el("label", {}, el("input", { type: "radio", name: "bands", value: kind, checked: on, onchange: () => switchTo(kind) }), ` ${words}`);
    card.append(el("fieldset", { class: "choice" }, el("legend", { text: "Left picture" }), radio("true", "true colour", true), radio("false", "false colour (near infrared, red, green)", false)));
    card.append(el("p", { text: "Right picture: water probability, white 0 % to dark blue 100 %. Grey: not seen. Yellow: outline." }));
    const shelf = el("div", { class: "shots" });
    for (const p of w.pictures) {
      const side = (src, alt) => {
        const img = el("img", { src, alt, width: p.size[0], height: p.size[1] });
        const svg = svgEl("svg", { viewBox: `0 0 1000 ${(1000 * p.size[1]) / p.size[0]}`, "aria-hidden": "true" });
        svg.append(svgEl("path", { d: p.outline }));
        return [img, el("div", {}, img, svg)];
      };
      const [left, one] = side(p.true, `colours of ${p.date}`), [, two] = side(p.water, `water probability of ${p.date}`);
      images.push([left, p]);
      shelf.append(el("div", { class: "shot" }, el("div", { class: "two" }, one, two),
        el("p", { text: `${p.date}, ${p.leaf}: ${area(p.area)}${finite(p.sd) ? `, sd ${area(p.sd)}` : ""}` })));
    }
    card.append(shelf);
    return card;
  },
  years(w) {
    const card = el("div", { class: "card", style: "margin-top:1.1rem" }, el("h3", { text: "Water years" }));
    if (!w.years.length) { card.append(el("p", { text: "No water year in this delivery." })); return card; }
    const names = [["mean_area_m2", "Mean extent, m²"], ["max_area_m2", "Largest extent, m²"], ["days_inundated", "Days inundated"], ["longest_dry_days", "Longest dry spell, days"]];
    const cell = (v) => (v && finite(v[0]) ? `${fixed(v[0], 0)} (${fixed(v[1], 0)} to ${fixed(v[2], 0)})` : "–");
    const head = el("tr", {}, el("th", { scope: "col", text: "Water year" }), el("th", { scope: "col", class: "n", text: "Days known" }), ...names.map(([, text]) => el("th", { scope: "col", class: "n", text })));
    const body = w.years.map((y) => el("tr", {}, el("th", { scope: "row", text: String(y.year) }), el("td", { class: "n", text: String(y.days) }), ...names.map(([key]) => el("td", { class: "n", text: cell(y[key]) }))));
    card.append(el("div", { class: "scroll" }, el("table", {}, el("caption", { text: "90 % intervals in brackets" }), el("thead", {}, head), el("tbody", {}, ...body))));
    return card;
  },
  show(w, element) {
    this.wetland = w; this.marker = [];
    element.replaceChildren(this.frame(w));
    const s = w.series;
    this.values = { area: numbers(s.area), lo: numbers(s.lo), hi: numbers(s.hi), stage: numbers(s.stage), sd: numbers(s.stageSd),
      basis: unroll(s.basis ?? [], s.n), leaf: unroll(s.leaf ?? [], s.n) };
    const range = s.n ? this.drawSeries(w) : null;
    if (!s.n) Charts.nothing(document.getElementById("d-series"), "There is no daily series for this wetland.");
    if (s.stage) this.drawStage(w, range);
    if (w.relation) this.drawRelation(w); else Charts.nothing(document.getElementById("d-relation"), "This wetland has no stage-area relation.");
    w.loggers.forEach((one, k) => this.drawLogger(one, document.getElementById(`d-logger${k}`)));
  },
  span(s) {
    return new Bokeh.Range1d({ start: (s.first - 2) * DAY_MS, end: (s.first + s.n + 1) * DAY_MS });
  },
  drawSeries(w) {
    const s = w.series, v = this.values, x = times(s.first, s.n);
    const figure = Charts.figure({ x_axis_type: "datetime", x_range: this.span(s) });
    figure.varea({ field: "x" }, { field: "lo" }, { field: "hi" }, { source: Charts.source({ x, lo: v.lo, hi: v.hi }), fill_color: "#8fa3a8", fill_alpha: 0.4 });
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: v.area }), line_color: "#1d2a2f", line_width: 1.4 });
    const seen = w.views, day = numbers(seen.day), a = numbers(seen.area), sd = numbers(seen.sd), leaf = numbers(seen.leaf), used = numbers(seen.used), reason = numbers(seen.reason);
    const dots = [], key = [["daily estimate", "#1d2a2f", "line"], ["90 % interval", "#d2dadc", "band"]];
    for (let state = 0; state < LEAF.length; state++) {
      const mine = Array.from({ length: seen.n }, (_, i) => i).filter((i) => leaf[i] === state && finite(a[i]));
      if (!mine.length) continue;
      const data = { x: mine.map((i) => day[i] * DAY_MS), y: mine.map((i) => a[i]), date: mine.map((i) => dayText(day[i])), scene: mine.map((i) => seen.scene[i]),
        sd: mine.map((i) => area(sd[i])), area: mine.map((i) => area(a[i])), word: mine.map((i) => (used[i] ? "used" : seen.reasons[reason[i]] || "set aside")),
        alpha: mine.map((i) => (used[i] ? 0.95 : 0)), line: mine.map((i) => (used[i] ? 1 : 0.5)) };
      const colour = PAGE.palette.leaf[state];
      dots.push(figure.scatter({ field: "x" }, { field: "y" }, { source: Charts.source(data), marker: PAGE.palette.leafMarks[state], size: 7, fill_color: colour, line_color: colour,
        fill_alpha: { field: "alpha" }, line_alpha: { field: "line" } }));
      key.push([`scene, ${LEAF[state]}`, colour, PAGE.palette.leafMarks[state]]);
    }
    Charts.hover(figure, dots, [["scene", "@scene"], ["day", "@date"], ["area", "@area"], ["sd", "@sd"], ["", "@word"]]);
    figure.y_range = new Bokeh.Range1d({ start: 0, end: Math.max(1, (w.areaMax || 1) * 1.05) });
    Charts.words(figure, "day (UTC)", "inundated area (m²)");
    Charts.key(document.getElementById("d-series"), key);
    this.marker.push(Charts.dayMarker(figure));
    Charts.put(document.getElementById("d-series"), figure, `Daily inundated area of ${w.id}, square metres`);
    return figure.x_range;
  },
  drawStage(w, range) {
    const s = w.series, v = this.values, x = times(s.first, s.n);
    const figure = Charts.figure({ x_axis_type: "datetime", x_range: Charts.tied(range, this.span(s)) });
    const half = (sign) => v.stage.map((y, i) => y + sign * 2 * (finite(v.sd[i]) ? v.sd[i] : 0));
    figure.varea({ field: "x" }, { field: "lo" }, { field: "hi" }, { source: Charts.source({ x, lo: half(-1), hi: half(1) }), fill_color: "#56B4E9", fill_alpha: 0.4 });
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: v.stage }), line_color: "#0072B2", line_width: 1.4 });
    figure.add_layout(new Bokeh.Span({ location: 0, dimension: "width", line_color: "#1d2a2f", line_width: 0.8 }));
    Charts.words(figure, "day (UTC)", "stage (m above lowest ground)");
    this.marker.push(Charts.dayMarker(figure));
    Charts.put(document.getElementById("d-stage"), figure, `Stage of ${w.id}, metres above lowest ground`);
  },
  drawRelation(w) {
    const r = w.relation, x = numbers(r.stage), figure = Charts.figure({});
    figure.varea({ field: "x" }, { field: "lo" }, { field: "hi" }, { source: Charts.source({ x, lo: numbers(r.lo), hi: numbers(r.hi) }), fill_color: "#8fa3a8", fill_alpha: 0.4, legend_label: "90 % band" });
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: numbers(r.area) }), line_color: "#1d2a2f", line_width: 1.8, legend_label: "relation" });
    if (r.pairs) {
      const stage = numbers(r.pairs.stage), a = numbers(r.pairs.area), leaf = numbers(r.pairs.leaf), day = numbers(r.pairs.day), censored = numbers(r.pairs.censored), dots = [];
      for (let state = 0; state < LEAF.length; state++) {
        const mine = Array.from(leaf.keys()).filter((i) => leaf[i] === state && finite(stage[i]) && finite(a[i]));
        if (!mine.length) continue;
        const data = { x: mine.map((i) => stage[i]), y: mine.map((i) => a[i]), date: mine.map((i) => dayText(day[i])), area: mine.map((i) => area(a[i])),
          word: mine.map((i) => (censored[i] ? "water at or below this stage" : "")), stage: mine.map((i) => `${fixed(stage[i], 3)} m`) };
        dots.push(figure.scatter({ field: "x" }, { field: "y" }, { source: Charts.source(data), marker: PAGE.palette.leafMarks[state], size: 7, fill_color: PAGE.palette.leaf[state], fill_alpha: 0.75, line_color: "#ffffff", line_width: 0.6, legend_label: LEAF[state] }));
      }
      Charts.hover(figure, dots, [["day", "@date"], ["stage", "@stage"], ["area", "@area"], ["", "@word"]]);
    }
    figure.y_range = new Bokeh.Range1d({ start: 0, end: Math.max(1, (w.areaMax || 1) * 1.05) });
    Charts.words(figure, "stage (m above lowest ground)", "inundated area (m²)");
    Charts.legend(figure, "bottom_right", false);
    Charts.put(document.getElementById("d-relation"), figure, `Stage-area relation of ${w.id}`);
  },
  drawLogger(one, element) {
    const x = Float64Array.from(numbers(one.minute), (m) => m * 60000), level = numbers(one.level), stage = numbers(one.stage), flag = numbers(one.flag);
    const figure = Charts.figure({ x_axis_type: "datetime" }), good = one.flags.indexOf("good"), colours = PAGE.palette.flags;
    const only = (values, keep) => Float64Array.from(values, (v, i) => (keep(flag[i]) ? v : NaN));
    const sound = (f) => f === good || one.flags[f] === "at or below sensor";
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: only(level, sound) }), line_color: colours["as read"], line_width: 1 });
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: only(stage, (f) => f === good) }), line_color: colours.stage, line_width: 1.4 });
    const out = Array.from(flag.keys()).filter((i) => !sound(flag[i]) && finite(level[i]));
    const sane = Array.from(level).filter((v, i) => sound(flag[i]) && finite(v));
    if (sane.length) {
      const low = sane.reduce((p, q) => Math.min(p, q)), high = sane.reduce((p, q) => Math.max(p, q)), room = 0.2 * Math.max(high - low, 0.05);
      figure.y_range = new Bokeh.Range1d({ start: low - room, end: high + room });
    }
    if (out.length) {
      const dots = figure.scatter({ field: "x" }, { field: "y" }, { source: Charts.source({ x: out.map((i) => x[i]), y: out.map((i) => level[i]), word: out.map((i) => one.flags[flag[i]]) }), marker: "x", size: 6, line_color: colours["left out"] });
      Charts.hover(figure, [dots], [["left out as", "@word"]]);
    }
    if (one.checks) {
      const t = Float64Array.from(numbers(one.checks.minute), (m) => m * 60000), y = numbers(one.checks.stage), sd = numbers(one.checks.sd);
      const bars = { x0: t, y0: y.map((v, i) => v - 2 * (sd[i] || 0)), y1: y.map((v, i) => v + 2 * (sd[i] || 0)) };
      figure.segment({ field: "x0" }, { field: "y0" }, { field: "x0" }, { field: "y1" }, { source: Charts.source(bars), line_color: colours.check, line_width: 1.4 });
      figure.scatter({ field: "x" }, { field: "y" }, { source: Charts.source({ x: t, y }), marker: "diamond", size: 9, fill_color: "#ffffff", line_color: colours.check, line_width: 1.6 });
    }
    Charts.words(figure, "time (UTC)", "level (m above lowest ground)");
    Charts.key(element, [["level as read", colours["as read"], "line"], ["stage", colours.stage, "line"], ["left out", colours["left out"], "cross"], ["field check (2 sd)", colours.check, "diamond"]]);
    Charts.put(element, figure, `Record of logger ${one.logger}, metres above lowest ground`);
  },
  day(day) {
    for (const span of this.marker) span.location = day * DAY_MS;
    const node = document.getElementById("d-day"), w = this.wetland;
    if (!node || !w) return;
    const i = day - w.series.first, v = this.values;
    if (i < 0 || i >= w.series.n) { node.textContent = `${dayText(day)}: outside this wetland's series.`; return; }
    const stage = finite(v.stage[i]) ? ` Stage ${fixed(v.stage[i], 3)} m.` : "";
    node.textContent = `${dayText(day)}: ${area(v.area[i])} (90 % interval ${fixed(v.lo[i], 0)} to ${fixed(v.hi[i], 0)} m²), ${BASIS[v.basis[i]] ?? "basis not known"}, ${LEAF[v.leaf[i]] ?? "leaf state not known"}.${stage}`;
  },
};
