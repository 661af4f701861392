// What a line of the score is made of: clock, staves, loudness, and the marks over them.

const NUMBERED_S = 300; // on longer lines the numbers of doubtful places would hide the staves

function boxOf(g, n, y) {
  const from = n * view.span, to = Math.min(record.length_s, from + view.span), right = g.left + (to - from) * g.perSecond;
  return {n, from, to, y, right, foot: y + g.line - g.band.below, columns: Math.max(1, Math.ceil(right - g.left))};
}

// What stays while the position moves.
function drawLine(pen, g, box) {
  drawSkips(pen, g, box);
  drawClock(pen, g, box);
  drawStaves(pen, g, box);
  drawLoudness(pen, g, box, box.foot - g.band.loudness);
  drawPlaces(pen, g, box);
}

function drawMarks(pen, g, box) {
  drawKindMarks(pen, g, box);
  drawPicked(pen, g, box);
  drawPosition(pen, g, box);
}

function xOf(g, box, time) {
  return g.left + (Math.max(box.from, Math.min(box.to, time)) - box.from) * g.perSecond;
}

function meets(box, from, to) {
  return to > box.from && from < box.to;
}

function staffTop(g, box, track) {
  return box.y + g.band.time + track.index * g.staff;
}

function drawSkips(pen, g, box) {
  for (const skip of record.skips) if (meets(box, skip.from_s, skip.to_s)) {
    const x = xOf(g, box, skip.from_s);
    pen.fillStyle = view.patterns.skip;
    pen.fillRect(x, box.y + g.band.time, xOf(g, box, skip.to_s) - x, box.foot - box.y - g.band.time);
    font(pen, g, 11);
    pen.textAlign = "left";
    pen.fillStyle = view.ink.faint;
    pen.fillText(cut(pen, `left out${skip.why ? ": " : ""}${skip.why}`, box.right - x), x, box.foot + 8 * g.u);
  }
}

function tickStep(g) {
  const least = 84 * g.u / g.perSecond;
  return [0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600].find((step) => step >= least) ?? 7200;
}

function drawClock(pen, g, box) {
  const step = tickStep(g), y = box.y + 14 * g.u;
  font(pen, g, 15, "600");
  pen.textAlign = "right";
  pen.fillStyle = view.ink.ink;
  pen.fillText(clock(box.from, box.from % 1 ? 1 : 0), g.left - 10 * g.u, y);
  font(pen, g, 11);
  pen.textAlign = "center";
  pen.fillStyle = view.ink.faint;
  pen.strokeStyle = view.ink.rule;
  pen.lineWidth = 1;
  pen.beginPath();
  for (let i = Math.floor(box.from / step) + 1; i * step < box.to - 1e-9; i++) {
    const x = Math.round(xOf(g, box, i * step)) + 0.5;
    pen.moveTo(x, box.y + g.band.time);
    pen.lineTo(x, box.foot);
    if (box.right - x > 16 * g.u) pen.fillText(clock(i * step, step < 1 ? 1 : 0), x, y);
  }
  pen.stroke();
}

function cut(pen, text, width) {
  if (pen.measureText(text).width <= width) return text;
  const letters = Array.from(text);
  while (letters.length > 1 && pen.measureText(letters.join("") + "\u2026").width > width) letters.pop();
  return letters.join("") + "\u2026";
}

function drawLoudness(pen, g, box, y) {
  const high = g.band.loudness, target = record.delivery.target_lufs;
  const at = (lufs) => y + high * Math.max(0, Math.min(1, (target + LOUDNESS_OVER_DB - lufs) / LOUDNESS_DB));
  font(pen, g, 14, "500");
  pen.textAlign = "right";
  pen.fillStyle = view.ink.ink;
  pen.fillText(KIND.loudness, g.left - 10 * g.u, y + high - 4 * g.u);
  font(pen, g, 11);
  pen.fillStyle = view.ink.loud;
  pen.fillText(`${plain(target, 0)} LUFS`, g.left - 10 * g.u, at(target));
  pen.strokeStyle = view.ink.loud;
  pen.lineWidth = 1;
  pen.setLineDash([6, 4]);
  pen.beginPath();
  pen.moveTo(g.left, Math.round(at(target)) + 0.5);
  pen.lineTo(box.right, Math.round(at(target)) + 0.5);
  pen.stroke();
  pen.setLineDash([]);
  pen.lineWidth = 1.7;
  pen.beginPath();
  let drawn = false;
  const step = Math.max(1, record.loudness_every_s * g.perSecond);
  for (let x = 0; x <= box.columns; x += step) {
    const lufs = loudnessAt(box.from + x / g.perSecond);
    if (lufs === null) { drawn = false; continue; }
    if (drawn) pen.lineTo(g.left + x, at(lufs)); else pen.moveTo(g.left + x, at(lufs));
    drawn = true;
  }
  pen.stroke();
}

function bracket(pen, x, to, y, high) {
  pen.beginPath();
  pen.moveTo(x + 4, y);
  pen.lineTo(x, y);
  pen.lineTo(x, y + high);
  pen.lineTo(x + 4, y + high);
  pen.moveTo(to - 4, y);
  pen.lineTo(to, y);
  pen.lineTo(to, y + high);
  pen.lineTo(to - 4, y + high);
  pen.stroke();
}

// Places to hear: their number in the list, over a short roof.
function drawPlaces(pen, g, box) {
  font(pen, g, 10.5);
  pen.textAlign = "center";
  const taken = {};
  record.places.forEach((place, i) => {
    if (!meets(box, place.from_s, place.to_s)) return;
    const x = xOf(g, box, place.from_s), to = Math.max(x + 2, xOf(g, box, place.to_s)), y = placeTop(g, box, place) - 1;
    pen.strokeStyle = pen.fillStyle = view.ink.ink;
    pen.lineWidth = 2;
    pen.beginPath();
    pen.moveTo(x, y + 4);
    pen.lineTo(x, y);
    pen.lineTo(to, y);
    pen.lineTo(to, y + 4);
    pen.stroke();
    if (view.span > NUMBERED_S || place.from_s < box.from || x < (taken[place.track] ?? -1)) return;
    const text = String(i + 1), wide = pen.measureText(text).width + 7 * g.u;
    pen.fillRect(x, y, wide, 13 * g.u);
    pen.fillStyle = view.ink.sheet;
    pen.fillText(text, x + wide / 2, y + 7 * g.u);
    taken[place.track] = x + wide + 2;
  });
}

function drawPicked(pen, g, box) {
  const picked = view.picked;
  if (!picked || !meets(box, picked.from, picked.to)) return;
  const x = xOf(g, box, picked.from), to = xOf(g, box, picked.to), [y, high] = pickedBand(g, box, picked);
  pen.globalAlpha = 0.45;
  pen.fillStyle = view.patterns.pick;
  pen.fillRect(x, y, to - x, high);
  pen.globalAlpha = 1;
  pen.strokeStyle = view.ink.ink;
  pen.lineWidth = 2;
  bracket(pen, x, to, y, high);
}

function drawPosition(pen, g, box) {
  if (lineOf(view.time) !== box.n) return;
  const x = Math.round(xOf(g, box, view.time)), y = box.y + 20 * g.u;
  pen.strokeStyle = pen.fillStyle = view.ink.ink;
  pen.lineWidth = 2;
  pen.beginPath();
  pen.moveTo(x, y);
  pen.lineTo(x, box.foot);
  pen.stroke();
  for (const [edge, towards] of [[y, 1], [box.foot, -1]]) {
    pen.beginPath();
    pen.moveTo(x - 5, edge - 3 * towards);
    pen.lineTo(x + 5, edge - 3 * towards);
    pen.lineTo(x, edge + 5 * towards);
    pen.fill();
  }
}

// All of it in one thin row: what sounds, where to listen, which part the score shows.
function drawMap(g) {
  const frame = getComputedStyle(map.parentElement);
  const width = map.parentElement.clientWidth - parseFloat(frame.paddingLeft) - parseFloat(frame.paddingRight);
  const high = mapHeight(g), pen = fitted(map, width, high), perSecond = width / record.length_s;
  pen.drawImage(mapGround(g, width, high), 0, 0, width, high);
  pen.fillStyle = view.ink.ink;
  for (const place of record.places) pen.fillRect(place.from_s * perSecond - 1, 0, 2, 5 * g.u);
  const first = score.scrollTop / g.line * view.span, last = (score.scrollTop + g.height) / g.line * view.span;
  pen.strokeStyle = view.ink.ink;
  pen.lineWidth = 1.5;
  pen.strokeRect(first * perSecond + 1, 4 * g.u, Math.min(width - 2, (last - first) * perSecond) - 1, high - 5 * g.u);
  pen.fillRect(view.time * perSecond - 1, 0, 2.5, high);
}

// The part of the map that stays, drawn once a size and once a colour.
function mapGround(g, width, high) {
  const key = [width, high, view.ink.own, window.devicePixelRatio].join();
  if (view.map.key === key) return view.map.canvas;
  const canvas = document.createElement("canvas");
  fillMap(fitted(canvas, width, high), g, width, high);
  view.map = {key, canvas};
  return canvas;
}
