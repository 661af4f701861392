// What a finished cut's score has: a staff for each given file, one for the mix as delivered, with the gain it got hanging
// below. The outline's height is the square root of the sample peak: 12 dB less is half as high.

const KIND = {
  track: "file", loudness: "Loudness", marks: "marks a stretch",
  bands: {ridge: 40, ribbon: 0, icicles: 0, mixRidge: 46, mixIcicles: 30},
  hear: [["source", "given file"], ["mix", "finished mix"]],
  keys: [],
  letters: {},
  legend: [["given", "given file: peaks, outlined"], ["own", "finished mix: peaks, filled"],
    ["gain", "gain it got: what the limiter takes hangs from the make-up gain; most and least at the left"],
    ["loud", "short-term loudness, target dashed"]],
};
const LEAST_DEPTH_DB = 6; // of the gain's scale: a little limiting shall look little

function unpackKind(raw) {
  raw.mix.pyramid = pyramid(bytesOf(raw.mix.levels));
  raw.limiter = {pyramid: pyramid(bytesOf(raw.limiter_steps))};
  raw.limiter.most_db = raw.limiter.pyramid[0].reduce((most, step) => Math.max(most, step), 0) / raw.steps_per_limiter_db;
  delete raw.mix.levels;
  delete raw.limiter_steps;
}

function drawStaves(pen, g, box) {
  for (const track of record.tracks) drawFile(pen, g, box, track);
  drawDelivered(pen, g, box, mixTop(g, box));
}

function mixTop(g, box) {
  return box.y + g.band.time + record.tracks.length * g.staff;
}

function drawFile(pen, g, box, track) {
  const y = staffTop(g, box, track), base = y + g.band.ridge;
  if (track === view.track && record.tracks.length > 1) {
    pen.fillStyle = view.ink.ink;
    pen.fillRect(2 * g.u, y + 4 * g.u, 4 * g.u, g.band.ridge - 2 * g.u);
  }
  nameStaff(pen, g, track.name, base - 6 * g.u, track === view.track ? "700" : "500");
  const shape = outline(g, box, track, y, base);
  pen.fillStyle = view.ink.rule;
  pen.fill(shape);
  pen.strokeStyle = view.ink.silence;
  pen.lineWidth = 1;
  pen.stroke(shape);
}

function drawDelivered(pen, g, box, y) {
  const base = y + g.band.mixRidge;
  nameStaff(pen, g, "Mix", base - 6 * g.u, "700");
  pen.fillStyle = view.ink.own;
  pen.fill(outline(g, box, record.mix, y, base));
  drawGain(pen, g, box, base + 4 * g.u);
}

function nameStaff(pen, g, name, y, weight) {
  pen.textAlign = "right";
  pen.fillStyle = view.ink.ink;
  font(pen, g, 14, weight);
  pen.fillText(cut(pen, name, g.left - 22 * g.u), g.left - 10 * g.u, y);
}

function outline(g, box, drawn, y, base) {
  const shape = new Path2D(), step = Math.max(1, g.perSecond * HOP_S * record.cell_hops);
  shape.moveTo(g.left, base);
  for (let x = 0; x < box.columns; x += step) {
    const time = box.from + x / g.perSecond, top = base - (base - y - 3) * Math.min(1, 10 ** (peakOver(drawn, time, time + step / g.perSecond) / 40));
    shape.lineTo(g.left + x, top);
    shape.lineTo(Math.min(box.right, g.left + x + step), top);
  }
  shape.lineTo(box.right, base);
  return shape;
}

// Peak level between two times in dBFS; -Infinity for silence.
function peakOver(drawn, from, to) {
  const step = loudest(drawn, from, to);
  return step ? step / record.steps_per_db + record.lowest_db : -Infinity;
}

function limitedOver(from, to) {
  return loudest(record.limiter, from, to) / record.steps_per_limiter_db;
}

// Make-up gain is the upper edge; what the limiter takes hangs from it.
function drawGain(pen, g, box, y) {
  const high = g.band.mixIcicles - 10 * g.u, deep = Math.max(LEAST_DEPTH_DB, record.limiter.most_db), step = Math.max(1, g.perSecond * HOP_S * record.cell_hops);
  const shape = new Path2D();
  shape.moveTo(g.left, y);
  for (let x = 0; x < box.columns; x += step) {
    const time = box.from + x / g.perSecond, down = y + high * limitedOver(time, time + step / g.perSecond) / deep;
    shape.lineTo(g.left + x, down);
    shape.lineTo(Math.min(box.right, g.left + x + step), down);
  }
  shape.lineTo(box.right, y);
  pen.strokeStyle = pen.fillStyle = view.ink.gain;
  pen.globalAlpha = 0.3;
  pen.fill(shape);
  pen.globalAlpha = 1;
  pen.lineWidth = 1.3;
  pen.stroke(shape);
  font(pen, g, 11);
  pen.textAlign = "right";
  pen.fillText(gainWords(), g.left - 10 * g.u, y + 7 * g.u);
}

function gainWords() {
  const {make_up_db: makeUp, limiter} = record;
  return limiter.most_db < 0.05 ? `${signed(makeUp)} dB` : `${signed(makeUp)} / ${signed(makeUp - limiter.most_db)} dB`;
}

function drawKindMarks() { /* a cut takes no corrections */ }

function placeTop(g, box, place) {
  return place.owner ? staffTop(g, box, place.owner) : mixTop(g, box);
}

function pickedBand(g, box) {
  const y = box.y + g.band.time - 2;
  return [y, box.foot - y];
}

function mapHeight(g) {
  return 36 * g.u;
}

// The mix in one row.
function fillMap(pen, g, width, high) {
  pen.fillStyle = view.ink.own;
  for (let x = 0; x < width; x++) {
    const from = x / width * record.length_s, tall = (high - 9 * g.u) * Math.min(1, 10 ** (peakOver(record.mix, from, from + record.length_s / width) / 40));
    pen.fillRect(x, high - 2 * g.u - tall, 1, tall);
  }
}

function levelWords(drawn, time) {
  const peak = peakOver(drawn, time, time + HOP_S / 2);
  return Number.isFinite(peak) ? `peak ${plain(peak)} dBFS` : "silent";
}

function wordsAt(time) {
  return [...record.tracks.map((track) => `${track.name} ${levelWords(track, time)}`), `mix ${levelWords(record.mix, time)}`,
    `make-up ${signed(record.make_up_db)} dB, limiter ${signed(-limitedOver(time, time + HOP_S / 2))} dB`];
}

function saidAt(time) {
  return wordsAt(time).join(", ");
}

function placeWords(found) {
  return [make("b", {}, `${clock(found.from_s, 1)} ${found.track || "mix"}`), make("span", {}, ` ${found.kind}`), make("small", {}, found.reason)];
}

function choseTrack() { /* nothing but the score hangs on it */ }

function pickedStretch() { /* nor on the marked stretch */ }

function takeAround() { /* there are no states to take a stretch of */ }

function fillKind() {
  byId("track").closest("label").hidden = record.tracks.length < 2;
  if (!record.places_more) return;
  byId("places").after(make("p", {class: "small", id: "places-more"}, `${record.places_more} weaker ones of the same kinds are left out.`));
}

function wireKind() { /* no controls of its own */ }
