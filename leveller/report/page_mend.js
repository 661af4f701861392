// A session's page beyond the score: what it is called and what its keys do, and corrections. These are made on a
// stretch or on all short answers, undone, kept over a reload, saved as corrections.csv.

const COLUMNS = ["track", "from_s", "to_s", "decide", "gain_db", "timeline"];
const KEPT_UNDER = `leveller corrections ${record.digest}`;

const KIND = {
  track: "track", loudness: "Mix", marks: "marks a stretch of the chosen track",
  bands: {ridge: 38, ribbon: 12, icicles: 20, mixRidge: 0, mixIcicles: 0},
  hear: [["source", "source"], ["stem", "stem"], ["mix", "mix"]],
  keys: [
    ["Enter", "marks the whole stretch of one state at the position"],
    ["O, B, S", "it is own voice, bleed, silence"],
    ["G", "to the gain field"],
    ["Ctrl+Z, Ctrl+Y", "undo, redo"],
  ],
  letters: {
    enter: () => takeAround(), o: () => decide("own"), b: () => decide("bleed"), s: () => decide("silence"),
    g: () => byId("gain").focus(),
  },
  legend: [["own", "own voice: filled"], ["bleed", "bleed: hatched"], ["silence", "silence: a line"],
    ["gain", "gain before make-up: hangs from its highest, named at the left beside its lowest"],
    ["loud", "mix: short-term loudness, target dashed"]],
};

const mends = {list: record.corrections.map((mend) => ({...mend})), before: [], after: []};

function change(list) {
  mends.before.push(mends.list);
  mends.after = [];
  mends.list = list;
  changed();
}

function undo() {
  if (!mends.before.length) return word("Nothing to undo.");
  mends.after.push(mends.list);
  mends.list = mends.before.pop();
  changed();
  word("Undone.");
}

function redo() {
  if (!mends.after.length) return word("Nothing to redo.");
  mends.before.push(mends.list);
  mends.list = mends.after.pop();
  changed();
  word("Done again.");
}

function changed() {
  keep();
  listMends();
  wantDrawing();
}

function keep() {
  try { localStorage.setItem(KEPT_UNDER, JSON.stringify(mends.list)); } catch { /* a browser that keeps nothing for files */ }
}

function recall() {
  try {
    const kept = JSON.parse(localStorage.getItem(KEPT_UNDER));
    if (Array.isArray(kept)) mends.list = kept.filter((mend) => trackNamed(mend.track));
  } catch { /* as above */ }
}

// Stretches that a decision applies to, or null with a word why there are none.
function targets() {
  const track = record.tracks[byId("mend-track").selectedIndex];
  if (byId("scope-short").checked) {
    const found = shortAnswers(track, secondsOf(byId("short-s").value));
    if (!found.length) word(`${track.name} has no stretch of its own that is as short.`);
    return found.length ? found.map(([from, to]) => [track, from, to]) : null;
  }
  const from = secondsOf(byId("mend-from").value), to = secondsOf(byId("mend-to").value);
  if (!(from < to) || from >= record.length_s) {
    word("Mark a stretch first, or type its times as 83.4 or 1:23.4; the second must lie behind the first.");
    return null;
  }
  return [[track, from, Math.min(to, record.length_s)]];
}

function decide(what) {
  mend({decide: what}, WORDS[what]);
}

function decideGain() {
  const text = byId("gain").value.trim().replace("\u2212", "-").replace(",", "."), [low, high] = record.gain_bounds_db;
  if (!/^[+-]?(\d+\.?\d*|\.\d+)$/.test(text) || Number(text) < low || Number(text) > high)
    return word(`Gain: a number of dB from ${plain(low, 0)} to ${plain(high, 0)}.`);
  return mend({gain_db: Number(text)}, `${signed(Number(text))} dB`);
}

// A correction of exactly the same stretch takes the new word in; others stay, later ones are stronger.
function mend(news, said) {
  const found = targets();
  if (!found) return;
  const {role, name} = found[0][0];
  if (news.decide && role !== "voice") { word(`${name} is a ${role} track: only its gain can be set.`); return; }
  let list = [...mends.list];
  for (const [track, from, to] of found) {
    const place = {track: track.name, from_s: Math.round(from * 100) / 100, to_s: Math.round(to * 100) / 100};
    const same = (m) => m.track === place.track && m.from_s === place.from_s && m.to_s === place.to_s;
    const older = list.find(same) ?? {decide: null, gain_db: null};
    list = [...list.filter((m) => !same(m)), {...place, decide: older.decide, gain_db: older.gain_db, ...news}];
  }
  change(list);
  word(found.length === 1 ? `${found[0][0].name}, ${clock(found[0][1])} to ${clock(found[0][2])}: ${said}.`
    : `${found[0][0].name}, ${found.length} short answers: ${said}.`);
}

function mendText(mend) {
  return [mend.decide, mend.gain_db === null ? null : `${signed(mend.gain_db)} dB`].filter(Boolean).join(", ");
}

if (record.timeline !== "opened") byId("again").append(" --align");
byId("by-hand").hidden = !record.by_hand;

function listMends() {
  byId("count").textContent = mends.list.length ? `(${mends.list.length})` : "(none yet)";
  byId("undo").disabled = !mends.before.length;
  byId("redo").disabled = !mends.after.length;
  byId("save").disabled = !mends.list.length;
  byId("corrections").replaceChildren(...mends.list.map((mend) => {
    const name = `${mend.track}, ${clock(mend.from_s)} to ${clock(mend.to_s)}: ${mendText(mend)}`;
    const go = make("button", {type: "button", class: "entry"}, name);
    const drop = make("button", {type: "button", "aria-label": `Drop ${name}`}, "drop");
    go.addEventListener("click", () => pick(trackNamed(mend.track), mend.from_s, mend.to_s, {jump: true}));
    drop.addEventListener("click", () => {
      change(mends.list.filter((other) => other !== mend));
      word("Dropped; Undo brings it back.");
      byId("mend-heading").focus();
    });
    return make("li", {}, go, drop);
  }));
}

function word(text) {
  byId("mend-word").textContent = text;
}

// A cell as the tool's own tables write it: nothing that a spreadsheet would run, quoted where RFC 4180 asks for it.
function cell(text) {
  const safe = /^[=+\-@\t\r]/.test(text) ? `'${text}` : text;
  return /[,;"\r\n']/.test(safe) ? `"${safe.replaceAll('"', '""')}"` : safe;
}

function csv() {
  const rows = mends.list.map((mend) => [
    cell(mend.track), mend.from_s.toFixed(2), mend.to_s.toFixed(2), mend.decide ?? "", mend.gain_db === null ? "" : String(mend.gain_db), record.timeline]);
  return [COLUMNS, ...rows].map((row) => row.join(",") + "\r\n").join("");
}

function save() {
  const url = URL.createObjectURL(new Blob([csv()], {type: "text/csv"}));
  const link = make("a", {href: url, download: "corrections.csv"});
  document.body.append(link);
  link.click();
  link.remove();
  setTimeout(() => URL.revokeObjectURL(url), 10000);
  word("corrections.csv is in your downloads.");
}

function drawKindMarks(pen, g, box) {
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

function wordsAt(time) {
  return record.tracks.map((track) => `${track.name} ${stateWord(track, time)} ${signed(gainAt(track, time))} dB`);
}

function saidAt(time) {
  return `${view.track.name}: ${stateWord(view.track, time)}, gain ${signed(gainAt(view.track, time))} dB`;
}

function placeWords(found) {
  return [make("b", {}, `${clock(found.from_s, 1)} ${found.track}`), make("span", {}, ` ${found.decided}, could be ${found.could_be}`),
    make("small", {}, `${found.reason} \u00b7 doubt ${plain(found.doubt, 2)}`)];
}

function choseTrack(track) {
  byId("mend-track").selectedIndex = track.index;
  countShort();
}

function pickedStretch() {
  if (view.picked) byId("scope-one").checked = true;
  byId("mend-from").value = view.picked ? clock(view.picked.from) : "";
  byId("mend-to").value = view.picked ? clock(view.picked.to) : "";
}

function takeAround() {
  const run = runAt(view.track, view.time);
  pick(view.track, view.track.runStart[run] * HOP_S, view.track.runStart[run + 1] * HOP_S);
}

function countShort() {
  byId("short-count").textContent = String(shortAnswers(view.track, secondsOf(byId("short-s").value)).length);
}

function typedStretch() {
  const from = secondsOf(byId("mend-from").value), to = secondsOf(byId("mend-to").value);
  if (from < to) pick(view.track, from, to, {jump: true});
}

function anyKey(event) {
  if (!(event.ctrlKey || event.metaKey) || event.target.matches("input:not([type=radio])")) return;
  const key = event.key.toLowerCase();
  if (key === "z" || key === "y") {
    event.preventDefault();
    if (key === "y" || event.shiftKey) redo(); else undo();
  }
}

function fillKind() {
  recall();
  byId("mend-track").append(...record.tracks.map((track) => make("option", {}, track.name)));
  listMends();
}

function wireKind(on) {
  for (const what of ["own", "bleed", "silence"]) on(`decide-${what}`, "click", () => decide(what));
  on("mend-track", "change", () => choose(record.tracks[byId("mend-track").selectedIndex]));
  on("decide-gain", "click", decideGain);
  on("gain", "keydown", (event) => { if (event.key === "Enter") decideGain(); });
  on("short-s", "input", countShort);
  on("undo", "click", undo);
  on("redo", "click", redo);
  on("save", "click", save);
  for (const id of ["mend-from", "mend-to"]) on(id, "change", typedStretch);
  document.addEventListener("keydown", anyKey);
}
