"use strict";
/* The table of wetlands: sorted by its headings, filtered by the controls above it. */
const COLUMNS = [
  { key: "id", name: "Wetland" },
  { key: "look", name: "Look", show: (v) => (v ? "yes" : ""), down: true },
  { key: "cover", name: "Cover" },
  { key: "areaMax", name: "Largest extent, m²", digits: 0 },
  { key: "mean", name: "Mean extent, m²", digits: 0 },
  { key: "least", name: "Least, m²", digits: 0 },
  { key: "most", name: "Most, m²", digits: 0 },
  { key: "interval", name: "Interval width, m²", digits: 0, down: true },
  { key: "viewsMonth", name: "Views this month", digits: 0 },
  { key: "viewsUsed", name: "Views in all", digits: 0 },
  { key: "lastView", name: "Last view", show: (v) => v ?? "never" },
  { key: "logger", name: "Logger", show: (v) => (v ? "yes" : ""), down: true },
  { key: "family", name: "Relation" },
  { key: "pairs", name: "Pairs", digits: 0 },
  { key: "rmse", name: "Relation RMSE, m²", digits: 0 },
  { key: "hidden", name: "Hidden views RMSE, %", digits: 1, factor: 100 },
  { key: "changed", name: "Days changed", digits: 0, down: true },
];
const WetlandTable = {
  sort: { key: "id", up: true }, rows: [],
  start(onChoose) {
    this.onChoose = onChoose;
    const head = el("tr", {});
    for (const column of COLUMNS) {
      column.head = el("th", { scope: "col", class: column.digits === undefined ? null : "n", "data-key": column.key },
        el("button", { type: "button", text: column.name, onclick: () => this.by(column) }));
      head.append(column.head);
    }
    document.querySelector("#table thead").append(head);
    this.rows = PAGE.table.id.map((name, i) => this.row(name, i));
    for (const id of ["f-name", "f-cover", "f-size", "f-logger", "f-look"]) {
      document.getElementById(id).addEventListener("input", () => this.show());
    }
    this.show();
  },
  row(name, i) {
    const row = el("tr", { "data-i": i });
    for (const column of COLUMNS) {
      const value = PAGE.table[column.key][i];
      if (column.key === "id") {
        const choose = PAGE.paged
          ? el("a", { class: "chip", href: `report_wetlands/${String(i + 1).padStart(5, "0")}.html`, title: name, text: name })
          : el("button", { class: "chip", type: "button", title: name, text: name, onclick: () => this.onChoose(i) });
        row.append(el("td", {}, choose));
      } else {
        const text = column.digits !== undefined ? fixed(finite(value) ? value * (column.factor ?? 1) : value, column.digits) : (column.show ?? String)(value);
        row.append(el("td", { class: column.digits !== undefined ? "n" : column.key === "lastView" ? "day" : null, text }));
      }
    }
    return row;
  },
  by(column) {
    const same = this.sort.key === column.key;
    this.sort = { key: column.key, up: same ? !this.sort.up : !column.down };
    this.show();
  },
  kept() {
    const value = (id) => document.getElementById(id).value, on = (id) => document.getElementById(id).checked;
    const part = value("f-name").toLowerCase(), cover = value("f-cover"), t = PAGE.table;
    const [low, high] = value("f-size") ? value("f-size").split(",").map(Number) : [-1, Infinity];
    return t.id.map((_, i) => i).filter((i) => t.id[i].toLowerCase().includes(part) && (!cover || t.cover[i] === cover)
      && t.areaMax[i] >= low && t.areaMax[i] < high && (!on("f-logger") || t.logger[i]) && (!on("f-look") || t.look[i]));
  },
  show() {
    const { key, up } = this.sort, values = PAGE.table[key], kept = this.kept();
    const blank = (v) => v === null || v === undefined || v === "";
    kept.sort((a, b) => {
      const p = values[a], q = values[b];
      if (blank(p) || blank(q)) return blank(p) - blank(q) || a - b;
      return (p < q ? -1 : p > q ? 1 : 0) * (up ? 1 : -1) || a - b;
    });
    document.querySelector("#table tbody").replaceChildren(...kept.map((i) => this.rows[i]));
    for (const column of COLUMNS) {
      if (column.key === key) column.head.setAttribute("aria-sort", up ? "ascending" : "descending");
      else column.head.removeAttribute("aria-sort");
    }
    document.getElementById("f-count").textContent = `${kept.length} of ${PAGE.table.id.length} wetlands`;
  },
  choose(i) { this.rows.forEach((row, k) => row.classList.toggle("on", k === i)); },
};
