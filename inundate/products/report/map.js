"use strict";
/* The map: one path a wetland, coloured by extent, uncertainty or skill on the chosen day. */
const WetlandMap = {
  kind: "extent", step: 0, over: -1, box: null,
  start(onChoose) {
    const map = PAGE.map, svg = document.getElementById("map"), pad = 30;
    this.svg = svg; this.onChoose = onChoose; this.n = map.paths.length;
    this.extent = numbers(PAGE.days.extent); this.width = numbers(PAGE.days.width);
    this.whole = [-pad, -pad, Math.max(map.width, 1) + 2 * pad, Math.max(map.height, 1) + 2 * pad];
    this.fills = map.paths.map((d, i) => {
      const path = svgEl("path", { d, "data-i": i });
      svg.append(path, svgEl("path", { d, class: "edge" }));
      return path;
    });
    this.chosen = svg.appendChild(svgEl("path", { class: "ring" }));
    this.marked = svg.appendChild(svgEl("path", { class: "ring over" }));
    this.scale = svg.appendChild(svgEl("g", {}));
    this.look(this.whole.slice());
    svg.addEventListener("click", (e) => { const i = this.at(e); if (i >= 0 && !this.moved) onChoose(i); });
    svg.addEventListener("pointerover", (e) => { const i = this.at(e); if (i >= 0) this.mark(i); });
    svg.addEventListener("keydown", (e) => this.key(e));
    this.drag();
    document.getElementById("zoom-in").addEventListener("click", () => this.zoom(0.6));
    document.getElementById("zoom-out").addEventListener("click", () => this.zoom(1 / 0.6));
    document.getElementById("zoom-all").addEventListener("click", () => this.look(this.whole.slice()));
    for (const radio of document.querySelectorAll("input[name=colour]")) {
      radio.addEventListener("change", () => { this.kind = radio.value; this.paint(); });
    }
  },
  at(event) { const i = event.target.getAttribute?.("data-i"); return i === null || i === undefined ? -1 : Number(i); },
  look(box) {
    this.box = box;
    this.svg.setAttribute("viewBox", box.join(" "));
    this.drawScale();
  },
  drawScale() {
    const wanted = (this.box[2] * PAGE.map.metres) / 5, power = 10 ** Math.floor(Math.log10(wanted));
    const metres = [5, 2, 1].map((k) => k * power).find((m) => m <= wanted) ?? power;
    const units = metres / PAGE.map.metres, x = this.box[0] + this.box[2] * 0.03, y = this.box[1] + this.box[3] * 0.97;
    const size = this.box[2] * 0.022;
    this.scale.replaceChildren(
      svgEl("path", { d: `M${x} ${y}h${units}`, style: "fill:none;stroke:#1d2a2f;stroke-width:2px;pointer-events:none" }),
      svgEl("text", { x, y: y - size * 0.6, style: `font-size:${size}px` }));
    this.scale.lastChild.textContent = metres >= 1000 ? `${metres / 1000} km` : `${metres} m`;
  },
  zoom(factor, centre) {
    const [x, y, w, h] = this.box, [cx, cy] = centre ?? [x + w / 2, y + h / 2];
    const to = Math.min(this.whole[2], Math.max(this.whole[2] / 200, w * factor)) / w;
    this.look([cx - (cx - x) * to, cy - (cy - y) * to, w * to, h * to]);
  },
  drag() {
    let from = null;
    this.svg.addEventListener("pointerdown", (e) => { from = [e.clientX, e.clientY, this.box.slice()]; this.moved = false; });
    window.addEventListener("pointerup", () => { from = null; });
    window.addEventListener("pointermove", (e) => {
      if (!from) return;
      const scale = Math.max(from[2][2] / this.svg.clientWidth, from[2][3] / this.svg.clientHeight);
      const dx = (e.clientX - from[0]) * scale, dy = (e.clientY - from[1]) * scale;
      if (Math.hypot(e.clientX - from[0], e.clientY - from[1]) < 5) return;
      this.moved = true;
      this.look([from[2][0] - dx, from[2][1] - dy, from[2][2], from[2][3]]);
    });
  },
  key(event) {
    const move = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
    if (move) this.mark((Math.max(this.over, move > 0 ? -1 : 0) + move + this.n) % this.n);
    else if (event.key === "Enter" && this.over >= 0) this.onChoose(this.over);
    else if (event.key === "+") this.zoom(0.6);
    else if (event.key === "-") this.zoom(1 / 0.6);
    else return;
    event.preventDefault();
  },
  value(i) {
    if (this.kind === "skill") {
      const hidden = PAGE.table.hidden[i], rmse = PAGE.table.rmse[i], most = PAGE.table.areaMax[i];
      return finite(hidden) ? hidden : finite(rmse) && most ? rmse / most : NaN;
    }
    const code = (this.kind === "extent" ? this.extent : this.width)[this.step * this.n + i];
    return code === undefined || code === 255 ? NaN : code / 200;
  },
  mark(i) { this.over = i; this.marked.setAttribute("d", PAGE.map.paths[i]); this.tell(); },
  choose(i) { this.chosen.setAttribute("d", i >= 0 ? PAGE.map.paths[i] : ""); },
  top() { return this.kind === "skill" ? 0.4 : 1; },
  tell() {
    const text = document.getElementById("map-text"), i = this.over;
    if (i < 0) { text.textContent = "Point at a wetland, or use the arrow keys on the map."; return; }
    const v = this.value(i), name = PAGE.table.id[i];
    text.textContent = this.kind === "extent" ? `${name}: ${share(v)} of its largest extent (${area(v * PAGE.table.areaMax[i])}) under water`
      : this.kind === "width" ? `${name}: 90 % interval as wide as ${share(v)} of its largest extent`
      : `${name}: held-out error ${share(v)} of its largest extent` + (finite(PAGE.table.hidden[i]) ? " (hidden views)" : " (stage-area pairs)");
  },
  paint() {
    const colours = PAGE.palette[this.kind], top = this.top();
    this.fills.forEach((path, i) => {
      const colour = rampColour(colours, this.value(i) / top);
      path.setAttribute("fill", colour); path.setAttribute("stroke", colour);
    });
    const words = { extent: ["dry", "all of the largest extent"], width: ["sure", "interval as wide as the largest extent"], skill: ["no error", "error of 40 % of the largest extent or more"] }[this.kind];
    document.getElementById("legend").replaceChildren(el("span", { text: words[0] }),
      ...colours.map((c) => el("i", { style: `background:${c}` })), el("span", { text: words[1] }),
      el("i", { style: `background:${PAGE.palette.unknown}` }), el("span", { text: "not known" }));
    this.tell();
  },
};
