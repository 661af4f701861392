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
  for (const track of record.tracks) drawStaff(pen, g, box, track, staffTop(g, box, track));
  drawLoudness(pen, g, box, box.foot - g.band.loudness);
  drawPlaces(pen, g, box);
}

function drawMarks(pen, g, box) {
  drawMends(pen, g, box);
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

function drawStaff(pen, g, box, track, y) {
  const base = y + g.band.ridge, ribbon = base + 1, ice = base + g.band.ribbon + 3 * g.u;
  if (track === view.track) {
    pen.fillStyle = view.ink.ink;
    pen.fillRect(2 * g.u, y + 4 * g.u, 4 * g.u, g.band.ridge + g.band.ribbon + g.band.icicles - 6 * g.u);
  }
  pen.textAlign = "right";
  pen.fillStyle = view.ink.ink;
  font(pen, g, 14, track === view.track ? "700" : "500");
  pen.fillText(cut(pen, track.name, g.left - 22 * g.u), g.left - 10 * g.u, base - 10 * g.u);
  font(pen, g, 11);
  pen.fillStyle = view.ink.gain;
  pen.fillText(`${signed(track.gainHighest / 100)} / ${signed(track.gainLowest / 100)} dB`, g.left - 10 * g.u, ice + 3 * g.u);
  const runs = visibleRuns(track, g, box);
  drawRidges(pen, g, track, runs, box, y, base);
  drawRibbon(pen, g, runs, ribbon);
  drawIcicles(pen, g, box, track, ice);
}

function cut(pen, text, width) {
  if (pen.measureText(text).width <= width) return text;
  const letters = Array.from(text);
  while (letters.length > 1 && pen.measureText(letters.join("") + "\u2026").width > width) letters.pop();
  return letters.join("") + "\u2026";
}

// Runs of one state as [state, first column, column after]; where many share a column the longest names it.
function visibleRuns(track, g, box) {
  const found = [], first = runAt(track, box.from);
  let current = null, column = -1, kept = 0;
  for (let i = first; i < track.runState.length && track.runStart[i] * HOP_S < box.to; i++) {
    const a = Math.max(0, (track.runStart[i] * HOP_S - box.from) * g.perSecond);
    const b = Math.min(box.columns, (track.runStart[i + 1] * HOP_S - box.from) * g.perSecond);
    if (Math.ceil(b) - Math.floor(a) <= 1 && Math.floor(a) === column && b - a <= kept) continue;
    [column, kept] = [Math.floor(a), b - a];
    if (current && current.state === track.runState[i]) { current.to = b; continue; }
    if (current) current.to = Math.min(current.to, a);
    current = {state: track.runState[i], from: a, to: b};
    found.push(current);
  }
  for (let i = 0; i + 1 < found.length; i++) found[i].to = found[i + 1].from;
  return found;
}

// One path a state: thousands of short runs cost three fills, not thousands.
function drawRidges(pen, g, track, runs, box, y, base) {
  record.states.forEach((state, n) => {
    const mine = runs.filter((run) => run.state === n), shape = new Path2D();
    if (!mine.length) return;
    for (const run of mine) addRidge(shape, g, track, run, box, y, base);
    if (state === "own") { pen.fillStyle = view.ink.own; pen.fill(shape); return; }
    if (state === "bleed") { pen.fillStyle = view.patterns.bleed; pen.fill(shape); }
    pen.strokeStyle = view.ink[state];
    pen.lineWidth = runs.length > box.columns / 4 ? 0.5 : 1;
    pen.stroke(shape);
  });
}

function addRidge(shape, g, track, run, box, y, base) {
  const height = g.band.ridge - 2, step = Math.max(1, g.perSecond * HOP_S * record.cell_hops);
  shape.moveTo(g.left + run.from, base);
  for (let at = Math.floor(run.from / step) * step; at < run.to; at += step) {
    const time = box.from + at / g.perSecond;
    const level = loudest(track, time, time + step / g.perSecond) / record.steps_per_db + record.lowest_db;
    const top = base - height * Math.max(0, Math.min(1, (level - track.top_db + RIDGE_DB) / RIDGE_DB));
    shape.lineTo(g.left + Math.max(run.from, at), top);
    shape.lineTo(g.left + Math.min(run.to, at + step), top);
  }
  shape.lineTo(g.left + run.to, base);
}

function drawRibbon(pen, g, runs, y) {
  const high = g.band.ribbon - 2, bands = {own: [0, high], bleed: [high * 0.3, high * 0.4], silence: [high / 2, 1]};
  record.states.forEach((state, n) => {
    pen.beginPath();
    for (const run of runs) if (run.state === n)
      pen.rect(g.left + run.from, y + bands[state][0], Math.max(0.5, run.to - run.from), bands[state][1]);
    pen.fillStyle = state === "bleed" ? view.patterns.bleed : view.ink[state];
    pen.fill();
  });
  pen.textAlign = "left";
  font(pen, g, 10.5);
  for (const run of runs) nameRun(pen, g, run, y, high);
}

// The state's word, where the run has room for it.
function nameRun(pen, g, run, y, high) {
  const state = record.states[run.state], x = g.left + run.from;
  if (run.to - run.from < 30) return;
  const room = pen.measureText(state).width + 8 * g.u;
  if (run.to - run.from < room + 6) return;
  if (state !== "own") { pen.fillStyle = view.ink.sheet; pen.fillRect(x + 3 * g.u, y, room - 4 * g.u, high); }
  pen.fillStyle = state === "own" ? view.ink.sheet : view.ink[state === "bleed" ? "bleed" : "faint"];
  pen.fillText(state, x + 5 * g.u, y + high / 2 + 0.5);
}

// The gain hangs from the track's highest; the deeper, the softer. One point a column, lowest and highest kept.
function drawIcicles(pen, g, box, track, y) {
  const high = g.band.icicles - 3, deep = Math.max(600, track.gainHighest - track.gainLowest);
  const down = (cdb) => y + high * (track.gainHighest - cdb) / deep;
  const points = gainPoints(g, box, track);
  pen.strokeStyle = pen.fillStyle = view.ink.gain;
  pen.lineWidth = 1.3;
  pen.beginPath();
  points.forEach(([x, cdb], i) => (i ? pen.lineTo(x, down(cdb)) : pen.moveTo(x, down(cdb))));
  pen.stroke();
  pen.lineTo(box.right, y);
  pen.lineTo(g.left, y);
  pen.globalAlpha = 0.16;
  pen.fill();
  pen.globalAlpha = 1;
}

function gainPoints(g, box, track) {
  const points = [[g.left, gainAt(track, box.from) * 100]], {gainHop, gainCdb} = track;
  let column = -1, low = 0, high = 0;
  const keep = () => { if (column >= 0) points.push([g.left + column, low], ...(high > low ? [[g.left + column, high]] : [])); };
  const dense = (lastNotAfter(gainHop, box.to / HOP_S) - lastNotAfter(gainHop, box.from / HOP_S)) > 2 * g.across;
  for (let i = lastNotAfter(gainHop, box.from / HOP_S) + 1; i < gainHop.length && gainHop[i] * HOP_S <= box.to; i++) {
    const x = (gainHop[i] * HOP_S - box.from) * g.perSecond;
    if (!dense) { points.push([g.left + x, gainCdb[i]]); continue; }
    if (Math.floor(x) !== column) { keep(); column = Math.floor(x); low = high = gainCdb[i]; }
    low = Math.min(low, gainCdb[i]);
    high = Math.max(high, gainCdb[i]);
  }
  if (dense) keep();
  points.push([box.right, gainAt(track, box.to) * 100]);
  return points;
}

function drawLoudness(pen, g, box, y) {
  const high = g.band.loudness, target = record.delivery.target_lufs;
  const at = (lufs) => y + high * Math.max(0, Math.min(1, (target + LOUDNESS_OVER_DB - lufs) / LOUDNESS_DB));
  font(pen, g, 14, "500");
  pen.textAlign = "right";
  pen.fillStyle = view.ink.ink;
  pen.fillText("Mix", g.left - 10 * g.u, y + high - 4 * g.u);
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

// Doubtful places: their number in the list, over a short roof.
function drawPlaces(pen, g, box) {
  font(pen, g, 10.5);
  pen.textAlign = "center";
  const taken = {};
  record.places.forEach((place, i) => {
    if (!meets(box, place.from_s, place.to_s) || !place.owner) return;
    const x = xOf(g, box, place.from_s), to = Math.max(x + 2, xOf(g, box, place.to_s)), y = staffTop(g, box, place.owner) - 1;
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

function drawMends(pen, g, box) {
  font(pen, g, 11);
  pen.textAlign = "left";
  for (const mend of mends.list) {
    const track = trackNamed(mend.track);
    if (!track || !meets(box, mend.from_s, mend.to_s)) continue;
    const x = xOf(g, box, mend.from_s), to = xOf(g, box, mend.to_s), y = staffTop(g, box, track) + 14 * g.u;
    pen.strokeStyle = view.ink.mend;
    pen.lineWidth = 2;
    bracket(pen, x, Math.max(x + 3, to), y, g.band.ridge + g.band.ribbon - 15 * g.u);
    const text = mendText(mend), wide = pen.measureText(text).width + 8 * g.u;
    if (mend.from_s < box.from) continue;
    pen.fillStyle = view.ink.mend;
    pen.fillRect(x, y, wide, 14 * g.u);
    pen.fillStyle = view.ink.sheet;
    pen.fillText(text, x + 4 * g.u, y + 7.5 * g.u);
  }
}

function drawPicked(pen, g, box) {
  const picked = view.picked;
  if (!picked || !meets(box, picked.from, picked.to)) return;
  const x = xOf(g, box, picked.from), to = xOf(g, box, picked.to), y = staffTop(g, box, picked.track) - 2;
  pen.globalAlpha = 0.45;
  pen.fillStyle = view.patterns.pick;
  pen.fillRect(x, y, to - x, g.staff - 2);
  pen.globalAlpha = 1;
  pen.strokeStyle = view.ink.ink;
  pen.lineWidth = 2;
  bracket(pen, x, to, y, g.staff - 2);
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

// The whole session in one thin row: who speaks, what is in doubt, which part the score shows.
function drawMap(g) {
  const frame = getComputedStyle(map.parentElement);
  const width = map.parentElement.clientWidth - parseFloat(frame.paddingLeft) - parseFloat(frame.paddingRight), row = Math.max(2, Math.min(6, 30 / record.tracks.length)) * g.u;
  const high = row * record.tracks.length + 12 * g.u, pen = fitted(map, width, high), perSecond = width / record.length_s;
  pen.drawImage(mapBars(g, width, row, high), 0, 0, width, high);
  pen.fillStyle = view.ink.ink;
  for (const place of record.places) pen.fillRect(place.from_s * perSecond - 1, 0, 2, 5 * g.u);
  const first = score.scrollTop / g.line * view.span, last = (score.scrollTop + g.height) / g.line * view.span;
  pen.strokeStyle = view.ink.ink;
  pen.lineWidth = 1.5;
  pen.strokeRect(first * perSecond + 1, 4 * g.u, Math.min(width - 2, (last - first) * perSecond) - 1, high - 5 * g.u);
  pen.fillRect(view.time * perSecond - 1, 0, 2.5, high);
}

// The part of the map that stays, drawn once a size and once a colour.
function mapBars(g, width, row, high) {
  const key = [width, high, view.ink.own, window.devicePixelRatio].join();
  if (view.map.key === key) return view.map.canvas;
  const canvas = document.createElement("canvas"), pen = fitted(canvas, width, high), own = record.states.indexOf("own");
  const perSecond = width / record.length_s;
  pen.fillStyle = view.ink.own;
  for (const track of record.tracks) for (let i = 0; i < track.runState.length; i++) if (track.runState[i] === own) {
    const x = track.runStart[i] * HOP_S * perSecond;
    pen.fillRect(x, 6 * g.u + track.index * row, Math.max(0.6, track.runStart[i + 1] * HOP_S * perSecond - x), row - 1);
  }
  view.map = {key, canvas};
  return canvas;
}
