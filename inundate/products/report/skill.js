"use strict";
/* Charts of skill: reliability, coverage, trend. */
function drawReliability() {
  const element = document.getElementById("reliability"), states = Object.entries(PAGE.skill.reliability).filter(([, bins]) => bins?.length);
  if (!states.length) { Charts.nothing(element, "The classifier's card holds no reliability: too few labels were kept out of training."); return; }
  const figure = Charts.figure({ x_range: new Bokeh.Range1d({ start: 0, end: 1 }), y_range: new Bokeh.Range1d({ start: 0, end: 1 }) });
  figure.line([0, 1], [0, 1], { line_color: "#55656b", line_dash: [5, 4], legend_label: "as it should be" });
  const order = ["leaf_off", "green_up", "leaf_on", "leaf_fall"], dots = [];
  for (const [name, bins] of states) {
    const state = order.indexOf(name), colour = state < 0 ? "#1d2a2f" : PAGE.palette.leaf[state];
    const kept = bins.filter((b) => b.n > 0 && finite(b.mean_probability) && finite(b.share_water));
    if (!kept.length) continue;
    const data = { x: kept.map((b) => b.mean_probability), y: kept.map((b) => b.share_water), n: kept.map((b) => b.n), state: kept.map(() => name.replace("_", "-")) };
    if (state < 0) {
      const sd = kept.map((b) => (finite(b.gap_sd) ? b.gap_sd : 0));
      figure.segment({ field: "x" }, { field: "lo" }, { field: "x" }, { field: "hi" }, { source: Charts.source({ x: data.x, lo: data.y.map((y, i) => y - 2 * sd[i]), hi: data.y.map((y, i) => y + 2 * sd[i]) }), line_color: colour });
    }
    const source = Charts.source(data);
    figure.line({ field: "x" }, { field: "y" }, { source, line_color: colour, line_width: state < 0 ? 2 : 1, legend_label: state < 0 ? "all (2 sd)" : LEAF[state] });
    dots.push(figure.scatter({ field: "x" }, { field: "y" }, { source, marker: state < 0 ? "circle" : PAGE.palette.leafMarks[state], size: 7, fill_color: colour, line_color: "#ffffff", legend_label: state < 0 ? "all (2 sd)" : LEAF[state] }));
  }
  Charts.hover(figure, dots, [["leaf state", "@state"], ["labels", "@n"], ["share of water", "@y{0.00}"]]);
  Charts.words(figure, "water probability given (share)", "water among labels (share)");
  Charts.legend(figure, "top_left", false);
  Charts.put(element, figure, "Reliability: share of water among labels by the probability given to them");
}
function drawCoverage() {
  const element = document.getElementById("coverage"), rows = PAGE.skill.coverage.filter((r) => finite(r.coverage));
  if (!rows.length) { Charts.nothing(element, "No views or loggers were hidden and predicted in this delivery, so coverage is not known."); return; }
  const kind = { views: "views", logger: "loggers" };
  const names = rows.map((r) => `${r.name.replace("_", "-")}, ${kind[r.kind]}`);
  element.style.height = `${Math.max(220, 26 * rows.length + 80)}px`;
  const figure = Charts.figure({ y_range: new Bokeh.FactorRange({ factors: names.slice().reverse() }), x_range: new Bokeh.Range1d({ start: 0, end: 1.02 }) });
  figure.add_layout(new Bokeh.Span({ location: 0.9, dimension: "height", line_color: "#55656b", line_dash: [5, 4] }));
  for (const [one, colour, mark] of [["views", "#0072B2", "circle"], ["logger", "#D55E00", "square"]]) {
    const mine = rows.map((r, i) => i).filter((i) => rows[i].kind === one);
    if (!mine.length) continue;
    const data = { x: mine.map((i) => rows[i].coverage), y: mine.map((i) => names[i]), n: mine.map((i) => rows[i].n), width: mine.map((i) => share(rows[i].width)) };
    const source = Charts.source(data);
    figure.segment(0, { field: "y" }, { field: "x" }, { field: "y" }, { source, line_color: "#c9d2d2" });
    const dots = figure.scatter({ field: "x" }, { field: "y" }, { source, marker: mark, size: 10, fill_color: colour, line_color: "#ffffff" });
    Charts.hover(figure, [dots], [["values", "@n"], ["covered", "@x{0.0 %}"], ["interval width", "@width"]]);
  }
  Charts.words(figure, "share covered (0.9 is right)", "");
  Charts.put(element, figure, "Share of hidden values inside the 90 % interval, by group");
}
function showTrend() {
  const element = document.getElementById("trend"), trend = PAGE.skill.trend;
  const months = [...new Set(trend.map((t) => t[0]))].sort().slice(-12), names = [...new Set(trend.map((t) => t[1]))].sort();
  if (months.length < 2) { element.replaceChildren(el("p", { text: "This is the first delivery with scores; the trend begins with the next." })); return; }
  const value = new Map(trend.map((t) => [`${t[0]} ${t[1]}`, t[2]]));
  const head = el("tr", {}, el("th", { scope: "col", text: "Score" }), ...months.map((m) => el("th", { scope: "col", class: "n", text: m })));
  const body = names.map((n) => el("tr", {}, el("th", { scope: "row", text: n }), ...months.map((m) => el("td", { class: "n", text: fixed(value.get(`${m} ${n}`), 3) }))));
  element.replaceChildren(el("div", { class: "scroll" }, el("table", {}, el("thead", {}, head), el("tbody", {}, ...body))));
}
