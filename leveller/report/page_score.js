// The score: set in lines like a text, every track a staff, below them the mix and its loudness. Drawn on one canvas, only
// what is seen. What a staff is made of hangs on the kind of page: page_staff.js for a session, page_cut.js for a cut.

const SPANS_S = [2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200];
const LOUDNESS_DB = 18; // height of the loudness staff
const LOUDNESS_OVER_DB = 6; // of which above the target
const GUTTER = 116, RIGHT = 14;
const BANDS = {time: 24, between: 9, loudness: 36, below: 20}; // those of staves and mix: KIND.bands
const STRETCHED = ["ridge", "icicles", "mixRidge", "mixIcicles", "loudness"];

const view = {time: 0, track: record.tracks[0], span: 30, picked: null, anchor: null, ink: {}, patterns: {}, wanted: false, map: {}, drawn: "", inks: 0};
const lines = byId("lines"), marks = byId("marks"), score = byId("score"), map = byId("map");

function unit() {
  return parseFloat(getComputedStyle(document.documentElement).fontSize) / 16;
}

function geometry() {
  const u = unit(), width = score.clientWidth, height = score.clientHeight, count = lineCount();
  const band = Object.fromEntries(Object.entries({...BANDS, ...KIND.bands}).map(([name, high]) => [name, high * u]));
  const lineHigh = () => band.time + band.mixRidge + band.mixIcicles + band.loudness + band.below + record.tracks.length * (band.ridge + band.ribbon + band.icicles + band.between);
  const taller = Math.min(2.2, height / (count * lineHigh()));
  if (taller > 1) for (const name of STRETCHED) band[name] *= taller;
  const across = Math.max(40, width - (GUTTER + RIGHT) * u);
  return {u, width, height, band, staff: band.ridge + band.ribbon + band.icicles + band.between, line: lineHigh(), left: GUTTER * u,
    across, count, perSecond: across / view.span};
}

function wantDrawing() {
  if (view.wanted) return;
  view.wanted = true;
  requestAnimationFrame(() => { view.wanted = false; draw(); });
}

function fitted(canvas, width, height) {
  const ratio = window.devicePixelRatio || 1;
  const wide = Math.round(width * ratio), high = Math.round(height * ratio);
  if (canvas.width !== wide || canvas.height !== high) {
    canvas.width = wide;
    canvas.height = high;
    canvas.style.width = `${width}px`;
    canvas.style.height = `${height}px`;
  }
  const pen = canvas.getContext("2d");
  pen.setTransform(ratio, 0, 0, ratio, 0, 0);
  pen.clearRect(0, 0, width, height);
  pen.textBaseline = "middle";
  return pen;
}

// Colours and hatchings from the style sheet, read again when light and dark change.
function mixInk() {
  const style = getComputedStyle(document.documentElement);
  for (const name of ["sheet", "ink", "faint", "rule", "own", "bleed", "silence", "gain", "loud", "pick", "mend"])
    view.ink[name] = style.getPropertyValue(`--${name}`).trim();
  view.patterns = {bleed: hatching(view.ink.bleed, 5, 1), skip: hatching(view.ink.rule, 9, 1), pick: hatching(view.ink.pick, 4, -1)};
  view.inks += 1;
  wantDrawing();
}

function hatching(colour, step, slope) {
  const ratio = Math.max(1, Math.round(window.devicePixelRatio || 1)), size = step * ratio;
  const tile = document.createElement("canvas");
  tile.width = tile.height = size;
  const pen = tile.getContext("2d");
  pen.strokeStyle = colour;
  pen.lineWidth = 1.4 * ratio;
  for (const shift of [-size, 0, size]) {
    pen.beginPath();
    pen.moveTo(shift - 1, slope > 0 ? size + 1 : -1);
    pen.lineTo(shift + size + 1, slope > 0 ? -1 : size + 1);
    pen.stroke();
  }
  const pattern = pen.createPattern(tile, "repeat");
  pattern.setTransform(new DOMMatrix().scale(1 / ratio));
  return pattern;
}

function draw() {
  const g = geometry();
  byId("length").style.height = `${Math.max(g.height, g.count * g.line)}px`;
  const top = score.scrollTop, boxes = [];
  const last = Math.min(g.count - 1, Math.floor((top + g.height) / g.line));
  for (let n = Math.max(0, Math.floor(top / g.line)); n <= last; n++) boxes.push(boxOf(g, n, n * g.line - top));
  const drawn = [top, view.span, g.width, g.height, g.u, window.devicePixelRatio, view.inks, view.track.index].join();
  if (drawn !== view.drawn) {
    const pen = fitted(lines, g.width, g.height);
    for (const box of boxes) drawLine(pen, g, box);
    view.drawn = drawn;
  }
  const pen = fitted(marks, g.width, g.height);
  for (const box of boxes) drawMarks(pen, g, box);
  drawMap(g);
}

function font(pen, g, size, weight = "") {
  pen.font = `${weight} ${size * g.u}px ${weight ? "Charter, 'Bitstream Charter', Georgia, serif" : "system-ui, sans-serif"}`.trim();
}

function lineOf(time) {
  return Math.max(0, Math.min(lineCount() - 1, Math.floor(time / view.span + 1e-9)));
}

function lineCount() {
  return Math.max(1, Math.ceil(record.length_s / view.span - 1e-9));
}

// What lies under a point of the canvas.
function under(x, y) {
  const g = geometry(), down = y + score.scrollTop, n = Math.max(0, Math.min(g.count - 1, Math.floor(down / g.line)));
  const staff = Math.floor((down - n * g.line - g.band.time + 4 * g.u) / g.staff);
  const along = Math.max(0, Math.min(view.span, (x - g.left) / g.perSecond));
  return {time: Math.min(record.length_s, n * view.span + along), track: record.tracks[staff] ?? null};
}

// Bring the position's line into view; where it is already, nothing moves.
function show(time) {
  const g = geometry(), top = lineOf(time) * g.line;
  if (g.line > g.height) {
    const staff = top + g.band.time + view.track.index * g.staff;
    if (staff - 30 * g.u < score.scrollTop || staff + g.staff > score.scrollTop + g.height)
      score.scrollTop = Math.max(top, staff + g.staff / 2 - g.height / 2);
  } else if (top < score.scrollTop || top + g.line > score.scrollTop + g.height)
    score.scrollTop = Math.max(0, top - Math.min(g.line / 2, g.height - g.line));
}

// A new length of the lines; a time stays at its height on the screen.
function setSpan(span, keep = view.time) {
  const before = geometry(), height = Math.floor(keep / view.span) * before.line - score.scrollTop;
  view.span = Math.max(SPANS_S[0], Math.min(wholeSpan(), span));
  const after = geometry();
  byId("length").style.height = `${Math.max(after.height, after.count * after.line)}px`;
  score.scrollTop = lineOf(keep) * after.line - Math.max(0, Math.min(after.height - after.line, height));
  byId("span").textContent = view.span < 60 ? `${plain(view.span, view.span % 1 ? 1 : 0)} s a line` : `${clock(view.span, 0)} a line`;
  wantDrawing();
}

function wholeSpan() {
  return Math.max(SPANS_S[0], record.length_s);
}

function nextSpan(longer) {
  const all = [...SPANS_S.filter((span) => span < wholeSpan()), wholeSpan()];
  const found = longer ? all.find((span) => span > view.span + 1e-6) : all.findLast((span) => span < view.span - 1e-6);
  setSpan(found ?? view.span);
}
