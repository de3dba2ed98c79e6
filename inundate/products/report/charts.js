"use strict";
/* Charts by BokehJS. Each chart stands in an element of its own and is taken away before it is drawn anew. */
Bokeh.set_log_level("error");
const Charts = {
  views: new Map(),
  busy: Promise.resolve(),
  figure(options) {
    const figure = Bokeh.Plotting.figure({
      sizing_mode: "stretch_both", tools: "xpan,xbox_zoom,reset,save", toolbar_location: "right",
      background_fill_color: "#ffffff", border_fill_color: "#ffffff", outline_line_color: null, min_border_right: 8,
      ...options,
    });
    figure.toolbar.logo = null;
    if (window.innerWidth < 600) for (const axis of figure.below) if (axis.ticker?.desired_num_ticks) axis.ticker.desired_num_ticks = 3;
    for (const axis of [figure.xaxis, figure.yaxis]) {
      axis.axis_label_text_font_style = "normal";
      axis.axis_label_text_font_size = "13px";
      axis.major_label_text_font_size = "12px";
      axis.axis_label_text_color = "#1d2a2f";
    }
    for (const grid of [figure.xgrid, figure.ygrid]) grid.grid_line_color = "#e6e9e7";
    return figure;
  },
  words(figure, x, y) { figure.xaxis.axis_label = x; figure.yaxis.axis_label = y; },
  legend(figure, location, horizontal) {
    const legend = figure.legend;
    if (!legend) return;
    legend.location = location;
    if (horizontal) legend.orientation = "horizontal";
    legend.label_text_font_size = "12px";
    legend.background_fill_alpha = 0.8;
    legend.padding = 4; legend.spacing = 2; legend.border_line_color = null;
    legend.click_policy = "hide";
  },
  put(element, figure, label) {
    if (!element) return;
    element.setAttribute("role", "img");
    element.setAttribute("aria-label", label);
    const old = Charts.views.get(element);
    if (old) { Charts.views.delete(element); try { old.remove(); } catch { element.replaceChildren(); } }
    element.replaceChildren();
    const place = el("div", { style: "height:100%;width:100%" });
    element.append(place);
    Charts.busy = Charts.busy
      .then(() => (place.isConnected ? Bokeh.Plotting.show(figure, place) : null))
      .then((view) => { if (view) Charts.views.set(element, view); });
  },
  nothing(element, text) { if (element) { element.style.height = "auto"; element.replaceChildren(el("p", { text })); } },
  /* A key in the page's own text, so that it never lies on the data. Entries: [words, colour, mark]. */
  key(element, entries) {
    const marks = { circle: '<circle cx="8" cy="8" r="5"/>', square: '<path d="M3 3h10v10h-10z"/>', triangle: '<path d="M8 2l6 11h-12z"/>',
      inverted_triangle: '<path d="M8 14l6 -11h-12z"/>', band: '<path d="M0 2h16v12h-16z"/>', cross: '<path d="M3 5l2-2 3 3 3-3 2 2-3 3 3 3-2 2-3-3-3 3-2-2 3-3z"/>', diamond: '<path d="M8 1l5 7-5 7-5-7z"/>', line: '<path d="M0 7h16v2.5h-16z"/>' };
    const key = el("div", { class: "key" });
    for (const [words, colour, mark] of entries) {
      const svg = svgEl("svg", { viewBox: "0 0 16 16", fill: colour, "aria-hidden": "true" });
      svg.innerHTML = marks[mark];
      key.append(el("span", {}, svg, words));
    }
    element.before(key);
  },
  source(data) { return new Bokeh.ColumnDataSource({ data }); },
  /* Two charts' ranges that follow each other (each chart is a document of its own, so they cannot share one range). */
  tied(one, other) {
    const follow = (from, to) => from.change.connect(() => {
      if (to.start !== from.start || to.end !== from.end) to.setv({ start: from.start, end: from.end });
    });
    follow(one, other); follow(other, one);
    return other;
  },
  dayMarker(figure) {
    const span = new Bokeh.Span({ location: 0, dimension: "height", line_color: "#1d2a2f", line_dash: [4, 3], line_width: 1.2 });
    figure.add_layout(span);
    return span;
  },
  hover(figure, renderers, tooltips) {
    figure.add_tools(new Bokeh.HoverTool({ renderers, tooltips, mode: "mouse" }));
  },
};
function times(first, n) { return Float64Array.from({ length: n }, (_, i) => (first + i) * DAY_MS); }

function drawTotal() {
  const totals = PAGE.totals, element = document.getElementById("total");
  if (!totals.n) { Charts.nothing(element, "There is no landscape total in this delivery."); return null; }
  const values = totals.area.map(numbers), x = times(totals.first, totals.n);
  const figure = Charts.figure({ x_axis_type: "datetime" });
  let below = new Float64Array(totals.n);
  totals.classes.forEach((name, k) => {
    const above = below.map((v, i) => v + (finite(values[k][i]) ? values[k][i] : 0));
    const colour = PAGE.palette.classes[k % PAGE.palette.classes.length];
    figure.varea({ field: "x" }, { field: "lo" }, { field: "hi" }, { source: Charts.source({ x, lo: below, hi: above }),
      fill_color: colour, fill_alpha: 0.85 });
    figure.line({ field: "x" }, { field: "y" }, { source: Charts.source({ x, y: above }), line_color: "#ffffff", line_width: 0.7 });
    below = above;
  });
  figure.y_range = new Bokeh.Range1d({ start: 0, end: Math.max(0.01, 1.05 * below.reduce((p, q) => Math.max(p, q), 0)) });
  Charts.words(figure, "day (UTC)", "inundated area (ha)");
  Charts.key(element, totals.classes.map((name, k) => [`${name} (${totals.wetlands[k]} wetlands)`, PAGE.palette.classes[k % PAGE.palette.classes.length], "band"]).reverse());
  const marker = Charts.dayMarker(figure);
  Charts.put(element, figure, "Total inundated area by size class and day, hectares");
  return (day) => {
    marker.location = day * DAY_MS;
    const i = day - totals.first;
    if (i < 0 || i >= totals.n) return;
    const parts = totals.classes.map((name, k) => `${name}: ${fixed(values[k][i], 2)} of ${fixed(totals.largest[k], 2)} ha`);
    document.getElementById("total-text").textContent = `${dayText(day)}: ${fixed(below[i], 2)} ha in all. ${parts.join("; ")}.`;
  };
}
