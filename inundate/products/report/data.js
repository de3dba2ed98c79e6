"use strict";
/* Reading the page's data: base64 arrays, runs of codes, days; and words for numbers. */
const LEAF = ["leaf-off", "green-up", "leaf-on", "leaf-fall"];
const BASIS = ["seen by a scene", "told by its own logger", "told by neighbours and weather", "told by the season"];
const DAY_MS = 86400000;

function readJson(id) {
  const node = document.getElementById(id);
  return node ? JSON.parse(node.textContent) : null;
}
function numbers(packed) {
  if (!packed) return [];
  const text = atob(packed.f ?? packed.b ?? packed.i);
  const bytes = new Uint8Array(text.length);
  for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
  if (packed.b !== undefined) return bytes;
  return packed.f !== undefined ? new Float32Array(bytes.buffer) : new Int32Array(bytes.buffer);
}
function unroll(runs, n) {
  const out = new Uint8Array(n);
  let at = 0;
  for (let i = 0; i < runs.length; i += 2) { out.fill(runs[i], at, at + runs[i + 1]); at += runs[i + 1]; }
  return out;
}
function dayText(day) { return new Date(day * DAY_MS).toISOString().slice(0, 10); }
function finite(v) { return v !== null && v !== undefined && Number.isFinite(v); }
/* Fixed digits, half to even as the exact decimal value of the number says; thousands by commas. */
function fixed(v, digits) {
  if (!finite(v)) return "–";
  const [whole, rest] = Math.abs(v).toFixed(digits).split(".");
  const text = whole.replace(/\B(?=(\d{3})+$)/g, ",") + (rest ? "." + rest : "");
  return (v < 0 && Number(v.toFixed(digits)) !== 0 ? "−" : "") + text;
}
function area(v) { return finite(v) ? fixed(v, 0) + " m²" : "not known"; }
function share(v) { return finite(v) ? fixed(100 * v, 0) + " %" : "not known"; }
function el(tag, attributes, ...children) {
  const node = document.createElement(tag);
  for (const [key, value] of Object.entries(attributes || {})) {
    if (key === "text") node.textContent = value;
    else if (key.startsWith("on")) node.addEventListener(key.slice(2), value);
    else if (value !== null && value !== false) node.setAttribute(key, value === true ? "" : value);
  }
  node.append(...children.filter((c) => c !== null && c !== undefined));
  return node;
}
function svgEl(tag, attributes) {
  const node = document.createElementNS("http://www.w3.org/2000/svg", tag);
  for (const [key, value] of Object.entries(attributes || {})) node.setAttribute(key, value);
  return node;
}
function rampColour(colours, value) {
  if (!finite(value)) return PAGE.palette.unknown;
  return colours[Math.min(colours.length - 1, Math.max(0, Math.floor(value * colours.length)))];
}
const PAGE = readJson("data");
