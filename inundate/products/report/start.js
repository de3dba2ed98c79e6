"use strict";
/* Puts the page together. */
(function start() {
  const own = document.getElementById("details");
  if (!document.getElementById("table")) {
    const only = readJson("w0");
    Details.show(only, own);
    if (only.series.n) Details.day(only.series.first + only.series.n - 1);
    return;
  }
  const days = PAGE.days, slider = document.getElementById("day"), pick = document.getElementById("pick");
  let setTotal = null;
  function today() { return days.first + Number(slider.value) * days.step; }
  function setDay() {
    const day = today();
    WetlandMap.step = Number(slider.value);
    document.getElementById("day-text").textContent = days.n ? dayText(day) : "no days";
    slider.setAttribute("aria-valuetext", dayText(day));
    WetlandMap.paint();
    if (setTotal) setTotal(day);
    Details.day(day);
  }
  function choose(i, go) {
    if (PAGE.paged) { window.location.href = `report_wetlands/${String(i + 1).padStart(5, "0")}.html`; return; }
    const name = document.getElementById("one-name");
    name.textContent = PAGE.table.id[i];
    pick.value = String(i);
    WetlandMap.choose(i); WetlandTable.choose(i);
    Details.show(readJson(`w${i}`), own);
    Details.day(today());
    if (go) document.getElementById("one").scrollIntoView();
  }
  slider.max = String(Math.max(days.n - 1, 0));
  slider.value = slider.max;
  slider.addEventListener("input", setDay);
  const step = (by) => { slider.value = String(Number(slider.value) + by); setDay(); };
  document.getElementById("day-prev").addEventListener("click", () => step(-1));
  document.getElementById("day-next").addEventListener("click", () => step(1));
  WetlandMap.start((i) => choose(i, true));
  WetlandTable.start((i) => choose(i, true));
  for (const chip of document.querySelectorAll("button.chip[data-wetland]")) {
    const i = PAGE.table.id.indexOf(chip.dataset.wetland);
    chip.title = chip.dataset.wetland;
    chip.addEventListener("click", () => { if (i >= 0) choose(i, true); });
  }
  setTotal = drawTotal();
  setDay();
  drawReliability();
  drawCoverage();
  showTrend();
  if (pick) {
    pick.append(...PAGE.table.id.map((name, i) => el("option", { value: String(i), text: name.length > 60 ? `${name.slice(0, 57)}…` : name })));
    pick.addEventListener("change", () => choose(Number(pick.value), false));
    const first = PAGE.table.logger.indexOf(true);
    if (PAGE.table.id.length) choose(Math.max(first, 0), false);
  }
})();
