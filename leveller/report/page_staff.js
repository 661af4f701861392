// What a session's score has and a cut's has not: states and gain of every track. A track is a staff of three bands - the
// ridge (level of the source), the ribbon (what was decided), the icicles (how far the gain hangs below the highest).

const WORDS = {own: "own voice", bleed: "bleed", silence: "silence"};
const RIDGE_DB = 50; // from a staff's upper edge down to its base line

function unpackKind(raw) {
  for (const track of raw.tracks) {
    track.gainHop = running(track.gain_hop_steps);
    track.gainCdb = Int32Array.from(track.gain_cdb);
    [track.gainLowest, track.gainHighest] = bounds(track.gainCdb);
    unpackRuns(track);
  }
}

function running(steps) {
  let sum = 0;
  return Int32Array.from(steps, (step) => (sum += step));
}

function bounds(values) {
  let low = Infinity, high = -Infinity;
  for (const value of values) {
    if (value < low) low = value;
    if (value > high) high = value;
  }
  return values.length ? [low, high] : [0, 0];
}

function unpackRuns(track) {
  const count = track.runs.length / 2;
  track.runStart = new Int32Array(count + 1);
  track.runState = new Uint8Array(count);
  for (let i = 0; i < count; i++) {
    track.runState[i] = track.runs[2 * i];
    track.runStart[i + 1] = track.runStart[i] + track.runs[2 * i + 1];
  }
  delete track.runs;
}

function runAt(track, time) {
  const run = lastNotAfter(track.runStart, Math.floor(time / HOP_S + 1e-6));
  return Math.max(0, Math.min(run, track.runState.length - 1));
}

function stateAt(track, time) {
  return record.states[track.runState[runAt(track, time)]] ?? "silence";
}

// The state in words; a track that is no voice has its role instead.
function stateWord(track, time) {
  return track.role === "voice" ? WORDS[stateAt(track, time)] : track.role;
}

function gainAt(track, time) {
  const hop = time / HOP_S, {gainHop, gainCdb} = track;
  const i = lastNotAfter(gainHop, hop);
  if (i < 0) return (gainCdb[0] ?? 0) / 100;
  if (i + 1 >= gainHop.length) return gainCdb[i] / 100;
  const part = (hop - gainHop[i]) / (gainHop[i + 1] - gainHop[i]);
  return (gainCdb[i] + part * (gainCdb[i + 1] - gainCdb[i])) / 100;
}

// Own stretches of a track that are no longer than so many seconds, as [from, to] in seconds.
function shortAnswers(track, mostSeconds) {
  const own = record.states.indexOf("own"), found = [];
  for (let i = 0; i < track.runState.length; i++) {
    const hops = track.runStart[i + 1] - track.runStart[i];
    if (track.runState[i] === own && hops * HOP_S <= mostSeconds + 1e-9)
      found.push([track.runStart[i] * HOP_S, Math.min(track.runStart[i + 1] * HOP_S, record.length_s)]);
  }
  return found;
}

function drawStaves(pen, g, box) {
  for (const track of record.tracks) drawStaff(pen, g, box, track, staffTop(g, box, track));
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

function placeTop(g, box, place) {
  return staffTop(g, box, place.owner ?? record.tracks[0]);
}

function pickedBand(g, box, picked) {
  return [staffTop(g, box, picked.track) - 2, g.staff - 2];
}

function mapRow(g) {
  return Math.max(2, Math.min(6, 30 / record.tracks.length)) * g.u;
}

function mapHeight(g) {
  return mapRow(g) * record.tracks.length + 12 * g.u;
}

// Who speaks when.
function fillMap(pen, g, width) {
  const own = record.states.indexOf("own"), perSecond = width / record.length_s, row = mapRow(g);
  pen.fillStyle = view.ink.own;
  for (const track of record.tracks) for (let i = 0; i < track.runState.length; i++) if (track.runState[i] === own) {
    const x = track.runStart[i] * HOP_S * perSecond;
    pen.fillRect(x, 6 * g.u + track.index * row, Math.max(0.6, track.runStart[i + 1] * HOP_S * perSecond - x), row - 1);
  }
}
