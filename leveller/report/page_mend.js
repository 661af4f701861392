// Corrections: made on a stretch or on all short answers, undone, kept over a reload, saved as corrections.csv.

const COLUMNS = ["track", "from_s", "to_s", "decide", "gain_db", "timeline"];
const KEPT_UNDER = `leveller corrections ${record.digest}`;

const mends = {list: record.corrections.map((mend) => ({...mend})), before: [], after: []};

function trackNamed(name) {
  return record.tracks.find((track) => track.name === name) ?? null;
}

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
