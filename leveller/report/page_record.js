// The record of the run, unpacked once, and questions to it. Times in seconds, levels in dB, hops of 10 ms.

const HOP_S = 0.01;
const PYRAMID_STEP = 4;

const record = unpacked(JSON.parse(document.getElementById("record").textContent));

function unpacked(raw) {
  raw.tracks.forEach((track, i) => {
    track.index = i;
    track.pyramid = pyramid(bytesOf(track.levels));
    delete track.levels;
  });
  unpackKind(raw);
  const bytes = bytesOf(raw.loudness);
  const view = new DataView(bytes.buffer);
  raw.loudness = Float32Array.from({length: bytes.length / 2}, (_, i) => view.getInt16(2 * i, true) / 100);
  return raw;
}

function bytesOf(base64) {
  const text = atob(base64);
  const bytes = new Uint8Array(text.length);
  for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
  return bytes;
}

function pyramid(base) {
  const storeys = [base];
  while (storeys.at(-1).length > 64) {
    const below = storeys.at(-1);
    const above = new Uint8Array(Math.ceil(below.length / PYRAMID_STEP));
    for (let i = 0; i < below.length; i++) {
      const at = (i / PYRAMID_STEP) | 0;
      if (below[i] > above[at]) above[at] = below[i];
    }
    storeys.push(above);
  }
  return storeys;
}

// Index of the last value that is not greater; -1 where all are.
function lastNotAfter(sorted, value) {
  let low = 0, high = sorted.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (sorted[middle] <= value) low = middle + 1; else high = middle;
  }
  return low - 1;
}

function loudnessAt(time) {
  const value = record.loudness[Math.floor((time - record.loudness_from_s) / record.loudness_every_s)];
  return value === undefined || value < -300 ? null : value;
}

function trackNamed(name) {
  return record.tracks.find((track) => track.name === name) ?? null;
}

// Loudest byte between two times, from the storey that needs few looks.
function loudest(track, from, to) {
  let storey = 0, cell = HOP_S * record.cell_hops;
  while (storey + 1 < track.pyramid.length && (to - from) / cell > 2 * PYRAMID_STEP) {
    storey += 1;
    cell *= PYRAMID_STEP;
  }
  const values = track.pyramid[storey];
  const last = Math.min(values.length - 1, Math.max(Math.floor(from / cell), Math.ceil(to / cell) - 1));
  let most = 0;
  for (let i = Math.max(0, Math.floor(from / cell)); i <= last; i++) if (values[i] > most) most = values[i];
  return most;
}

function clock(time, digits = 2) {
  const unit = 10 ** digits, whole = Math.round(Math.max(0, time) * unit);
  const seconds = Math.floor(whole / unit), part = digits ? "." + String(whole % unit).padStart(digits, "0") : "";
  const two = (n) => String(n).padStart(2, "0");
  const hours = Math.floor(seconds / 3600), minutes = Math.floor(seconds / 60) % 60;
  return (hours ? `${hours}:${two(minutes)}` : String(minutes)) + ":" + two(seconds % 60) + part;
}

// Seconds from "83.4", "1:23.4" or "0:01:23,4"; NaN for anything else.
function secondsOf(text) {
  const steps = text.trim().replace(",", ".").split(":");
  if (steps.length > 3 || !steps.every((step) => /^\d+(\.\d+)?$/.test(step))) return NaN;
  return steps.reduce((sum, step) => 60 * sum + Number(step), 0);
}

function signed(value, digits = 1) {
  const text = Math.abs(value).toFixed(digits);
  return (Number(text) === 0 ? "" : value < 0 ? "\u2212" : "+") + text;
}

// A number with a real minus sign, for reading.
function plain(value, digits = 1) {
  return value.toFixed(digits).replace("-", "\u2212");
}

function make(tag, attributes = {}, ...children) {
  const element = document.createElement(tag);
  for (const [name, value] of Object.entries(attributes)) element.setAttribute(name, value);
  element.append(...children);
  return element;
}

function byId(id) {
  return document.getElementById(id);
}
