// Wiring: what a key, a click or a drag does, and what is said about the position.

const KEYS = [
  ["Left, Right", "a tenth of a second at close range, a second else; with Ctrl ten times as far"],
  ["Up, Down", "the line above, the line below"],
  ["Home, End", "start and end of the line; with Ctrl of it all"],
  ["with Shift", KIND.marks],
  ...(record.tracks.length > 1 ? [["T, Shift+T", `next ${KIND.track}, ${KIND.track} before`]] : []),
  ["Space", "plays, or pauses; a marked stretch alone"],
  [KIND.hear.map((_, i) => i + 1).join(", "), `hear ${KIND.hear.map(([, text]) => `the ${text}`).join(", ")}`],
  ["N, P", "next place worth a listen, place before: jumps and plays"],
  ...KIND.keys,
  ["+, \u2212, 0", "shorter lines, longer lines, all on one line"],
  ["Escape", "unmarks"],
];
const LEAD_S = 1; // heard before and behind a doubtful place

let place = -1;
let saying = 0;

function moveTo(time, {quiet = false} = {}) {
  view.time = Math.max(0, Math.min(record.length_s, time));
  show(view.time);
  describe(quiet);
  wantDrawing();
}

function choose(track) {
  view.track = track;
  byId("track").selectedIndex = track.index;
  choseTrack(track);
  if (sound.playing && sound.what !== "mix") playFrom(view.time, sound.until); else shownPlaying();
  show(view.time);
  describe();
  wantDrawing();
}

function pick(track, from, to, {jump = false} = {}) {
  const picked = {track, from: Math.max(0, Math.min(from, to)), to: Math.min(record.length_s, Math.max(from, to))};
  view.picked = picked.to - picked.from < HOP_S / 2 ? null : picked;
  if (track !== view.track) choose(track);
  pickedStretch();
  if (jump) moveTo(from);
  else describe();
  wantDrawing();
}

function unpick() {
  view.picked = view.anchor = null;
  pickedStretch();
  describe();
  wantDrawing();
}

// The position in words: beside the score for all, and aloud for who cannot see it.
function describe(quiet = false) {
  byId("clock").textContent = clock(view.time);
  const lufs = loudnessAt(view.time), parts = wordsAt(view.time);
  if (lufs !== null) parts.push(`mix ${plain(lufs)} LUFS short-term`);
  byId("reading").textContent = `At ${clock(view.time)}: ${parts.join(" \u00b7 ")}`;
  if (quiet) return;
  clearTimeout(saying);
  saying = setTimeout(() => {
    const picked = view.picked ? `, marked ${clock(view.picked.from)} to ${clock(view.picked.to)} on ${view.picked.track.name}` : "";
    byId("said").textContent = `${clock(view.time)}, ${saidAt(view.time)}${picked}`;
  }, 300);
}

function toPlace(i) {
  if (!record.places.length) return;
  place = (i + record.places.length) % record.places.length;
  const found = record.places[place];
  [...byId("places").children].forEach((item, n) => item.toggleAttribute("data-here", n === place));
  const item = byId("places").children[place];
  if (document.activeElement?.closest("#places")) item.firstElementChild.focus();
  item.scrollIntoView({block: "nearest"});
  pick(found.owner ?? view.track, found.from_s, found.to_s, {jump: true});
  playFrom(Math.max(0, found.from_s - LEAD_S), Math.min(record.length_s, found.to_s + LEAD_S));
}

function step(time, marking) {
  const anchor = view.anchor ?? view.time;
  if (sound.playing && !marking) playFrom(Math.max(0, Math.min(record.length_s, time)));
  moveTo(time);
  if (!marking) { if (view.picked) unpick(); view.anchor = null; return; }
  pick(view.track, anchor, view.time);
  view.anchor = anchor;
}

function turnTrack(by) {
  const count = record.tracks.length;
  choose(record.tracks[(view.track.index + by + count) % count]);
}

function scoreKey(event) {
  const near = view.span <= 30 ? 0.1 : 1, far = event.ctrlKey || event.metaKey ? 10 : 1;
  const lineStart = lineOf(view.time) * view.span, lineEnd = Math.min(record.length_s, lineStart + view.span - HOP_S);
  const moves = {
    ArrowLeft: () => view.time - near * far, ArrowRight: () => view.time + near * far,
    ArrowUp: () => view.time - view.span, ArrowDown: () => view.time + view.span,
    PageUp: () => view.time - view.span * 3, PageDown: () => view.time + view.span * 3,
    Home: () => (far > 1 ? 0 : lineStart), End: () => (far > 1 ? record.length_s : lineEnd),
  };
  if (event.key in moves) step(moves[event.key](), event.shiftKey);
  else if (far > 1 || event.altKey || !letterKey(event)) return;
  event.preventDefault();
}

function letterKey(event) {
  const heard = KIND.hear.map(([what], i) => [i + 1, () => hear(what)]);
  const keys = {
    " ": playOrPause, escape: unpick, t: () => turnTrack(event.shiftKey ? -1 : 1), n: () => toPlace(place + 1), p: () => toPlace(place < 0 ? -1 : place - 1),
    "+": () => nextSpan(false), "=": () => nextSpan(false), "-": () => nextSpan(true), 0: () => setSpan(wholeSpan()),
    ...Object.fromEntries(heard), ...KIND.letters,
  };
  const act = keys[event.key.toLowerCase()];
  if (act) act();
  return Boolean(act);
}

let pressed = null;

function spot(event) {
  const box = marks.getBoundingClientRect();
  return under(event.clientX - box.left, event.clientY - box.top);
}

function pressedDown(event) {
  if (event.button !== 0) return;
  const {time, track} = spot(event);
  pressed = {x: event.clientX, y: event.clientY, time, track: track ?? view.track, moved: false};
  marks.setPointerCapture(event.pointerId);
}

function dragged(event) {
  if (!pressed) return;
  pressed.moved ||= Math.hypot(event.clientX - pressed.x, event.clientY - pressed.y) > 4;
  if (pressed.moved) pick(pressed.track, pressed.time, spot(event).time);
}

function released() {
  if (!pressed) return;
  const {time, track, moved} = pressed;
  pressed = null;
  if (moved) { moveTo(view.picked ? view.picked.from : time); return; }
  view.anchor = null;
  if (view.picked) unpick();
  if (track !== view.track) choose(track);
  const playing = Boolean(sound.playing);
  moveTo(time);
  if (playing) playFrom(time);
}

function wheeled(event) {
  if (!event.ctrlKey) return;
  event.preventDefault();
  setSpan(view.span * Math.exp(event.deltaY / 400), spot(event).time);
}

function fill() {
  const {delivery} = record, silent = delivery.reads_lufs === null || delivery.peak_dbtp === null;
  byId("title").textContent = record.title;
  byId("facts").textContent = [clock(record.length_s, 0), `${record.tracks.length} ${KIND.track}${record.tracks.length === 1 ? "" : "s"}`,
    `${delivery.name}: wanted ${plain(delivery.target_lufs)} LUFS under ${plain(delivery.ceiling_dbtp)} dBTP`,
    silent ? "reads silent" : `reads ${plain(delivery.reads_lufs)} LUFS, ${plain(delivery.peak_dbtp)} dBTP`,
    delivery.met ? "on target" : `not on target${delivery.reason ? `: ${delivery.reason}` : ""}`].join(" \u00b7 ");
  byId("track").append(...record.tracks.map((track) => make("option", {}, track.name)));
  fillKind();
  fillHear();
  fillPlaces();
  byId("keys-list").append(...KEYS.flatMap(([key, does]) => [make("dt", {}, key), make("dd", {}, does)]));
  byId("summary-box").hidden = !record.summary.length;
  for (const {heading, lines: texts} of record.summary)
    byId("summary").append(make("h3", {}, heading), ...summed(texts));
  byId("legend").append(...KIND.legend.map(([kind, text]) => make("li", {class: kind}, text)));
}

// Sentences as lists; lines with tabs as tables, the first of each its head.
function summed(texts) {
  const out = [];
  for (const text of texts) {
    const kind = text.includes("\t") ? "TABLE" : "UL";
    if (out.at(-1)?.tagName !== kind) out.push(make(kind.toLowerCase()));
    const table = out.at(-1);
    if (kind === "UL") { table.append(make("li", {}, text)); continue; }
    const scope = table.rows.length ? "row" : "col", cells = text.split("\t");
    table.append(make("tr", {}, ...cells.map((cell, i) => cell && (scope === "col" || i === 0)
      ? make("th", {scope}, cell) : make("td", {}, cell))));
  }
  return out;
}

function fillHear() {
  for (const [what, text] of KIND.hear) {
    const radio = make("input", {type: "radio", name: "hear", id: `hear-${what}`, "aria-describedby": `hear-${what}-why`});
    radio.addEventListener("change", () => hear(what));
    byId("hear").append(make("label", {}, radio, ` ${text} `, make("small", {id: `hear-${what}-why`})));
  }
}

function fillPlaces() {
  byId("places-none").hidden = record.places.length > 0;
  record.places.forEach((found, i) => {
    found.owner = trackNamed(found.track);
    const button = make("button", {type: "button", class: "entry"}, ...placeWords(found));
    button.addEventListener("click", () => toPlace(i));
    button.addEventListener("keydown", (event) => {
      const by = {ArrowDown: 1, ArrowUp: -1}[event.key];
      if (by) toPlace(i + by);
      else if (event.ctrlKey || event.metaKey || event.altKey || " Enter".includes(event.key) || !letterKey(event)) return;
      event.preventDefault();
    });
    byId("places").append(make("li", {}, button));
  });
}

function wire() {
  const on = (id, kind, act) => byId(id).addEventListener(kind, act);
  on("play", "click", playOrPause);
  on("longer", "click", () => nextSpan(true));
  on("shorter", "click", () => nextSpan(false));
  on("whole", "click", () => setSpan(wholeSpan()));
  on("track", "change", () => choose(record.tracks[byId("track").selectedIndex]));
  on("keys-open", "click", () => {
    byId("keys").hidden = !byId("keys").hidden;
    byId("keys-open").setAttribute("aria-expanded", String(!byId("keys").hidden));
  });
  wireKind(on);
  wireScore(on);
}

function wireScore(on) {
  on("score", "keydown", scoreKey);
  on("score", "scroll", wantDrawing);
  score.addEventListener("wheel", wheeled, {passive: false});
  on("marks", "pointerdown", pressedDown);
  on("marks", "pointermove", dragged);
  on("marks", "pointerup", released);
  on("marks", "pointercancel", () => { pressed = null; });
  on("marks", "dblclick", (event) => {
    const {time, track} = spot(event);
    if (track) choose(track);
    moveTo(time);
    takeAround();
    playOrPause();
  });
  on("map", "click", (event) => {
    const box = map.getBoundingClientRect(), time = (event.clientX - box.left) / box.width * record.length_s;
    if (sound.playing) playFrom(time);
    moveTo(time);
  });
  new ResizeObserver(wantDrawing).observe(score);
  for (const query of ["(prefers-color-scheme: dark)", "(forced-colors: active)", "(prefers-contrast: more)"])
    matchMedia(query).addEventListener("change", mixInk);
}

fill();
wire();
mixInk();
setSpan(record.length_s <= 40 ? wholeSpan() : record.length_s <= 600 ? 20 : 60);
choose(record.tracks[0]);
describe(true);
draw();
document.documentElement.setAttribute("data-ready", "");
