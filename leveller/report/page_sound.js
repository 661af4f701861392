// What is heard: one file at a time, the mix, a stem or a source, always at the score's position.

const sound = {what: "mix", playing: null, starting: null, until: null, players: new Map(), broken: new Map(), turn: 0};

function heardFile(what, track) {
  if (what === "mix") return {url: "mix.wav", offset: 0, why: "", note: ""};
  if (what === "stem") return {url: track.stem, offset: 0, why: "", note: ""};
  return {url: track.source, offset: track.offset_s, why: track.source_why, note: track.source_note};
}

function whyNot(what, track) {
  const file = heardFile(what, track);
  return file.url === null ? file.why : sound.broken.get(file.url) ?? "";
}

function playerOf(url) {
  if (!sound.players.has(url)) {
    const player = new Audio();
    player.preload = "metadata";
    player.src = url;
    sound.players.set(url, player);
  }
  return sound.players.get(url);
}

function ready(player) {
  if (player.readyState >= 1) return Promise.resolve();
  return new Promise((resolve, reject) => {
    player.addEventListener("loadedmetadata", resolve, {once: true});
    player.addEventListener("error", () => reject(new Error("no such file here, or not playable")), {once: true});
  });
}

// Play from a time, up to another where one is given. Whoever asks last is heard.
async function playFrom(time, until = null) {
  stop();
  trouble("");
  const turn = ++sound.turn, file = heardFile(sound.what, view.track);
  if (whyNot(sound.what, view.track)) return refuse(file, whyNot(sound.what, view.track));
  const player = playerOf(file.url);
  sound.starting = player;
  sound.until = until;
  try {
    await ready(player);
    if (turn !== sound.turn) return;
    if (time < file.offset) time = file.offset;
    player.currentTime = time - file.offset;
    await player.play();
  } catch (error) {
    if (turn !== sound.turn) return;
    sound.starting = null;
    refuse(file, player.error || player.readyState === 0
      ? "no such file here, or this browser cannot play it" : error.message, Boolean(player.error));
    return;
  }
  if (turn !== sound.turn) {
    if (player !== (sound.playing?.player ?? sound.starting)) player.pause();
    return;
  }
  sound.starting = null;
  sound.playing = {player, offset: file.offset};
  shownPlaying();
  requestAnimationFrame(follow);
}

function refuse(file, why, lasting = true) {
  const name = file.url === null ? "The source" : decodeURIComponent(file.url);
  if (lasting && file.url !== null) sound.broken.set(file.url, why);
  trouble(`${name}: ${why}`);
  shownPlaying();
}

function stop() {
  sound.turn += 1;
  if (sound.playing) sound.playing.player.pause();
  sound.playing = null;
  sound.starting = null;
  sound.until = null;
  shownPlaying();
}

function follow() {
  if (!sound.playing) return;
  const {player, offset} = sound.playing;
  const time = player.currentTime + offset;
  if (player.ended || player.paused || (sound.until !== null && time >= sound.until)) {
    if (sound.until !== null) moveTo(sound.until); else moveTo(time);
    stop();
    return;
  }
  moveTo(time, {quiet: true});
  requestAnimationFrame(follow);
}

// A file may take a moment to start; who asks again meanwhile wants silence.
function playOrPause() {
  if (sound.playing || sound.starting) stop();
  else if (view.picked) playFrom(view.picked.from, view.picked.to);
  else playFrom(view.time >= record.length_s - 0.05 ? 0 : view.time);
}

// Another file at the same position; a stretch that was playing plays on.
function hear(what) {
  sound.what = what;
  if (sound.playing || sound.starting) playFrom(view.time, sound.until);
  else shownPlaying();
}

function shownPlaying() {
  const play = byId("play");
  play.textContent = sound.playing ? "Pause" : "Play";
  play.setAttribute("aria-pressed", String(Boolean(sound.playing)));
  for (const [what] of KIND.hear) {
    const radio = byId(`hear-${what}`), why = whyNot(what, view.track);
    radio.disabled = Boolean(why);
    radio.checked = sound.what === what;
    byId(`hear-${what}-why`).textContent = why || heardFile(what, view.track).note;
  }
}

function trouble(text) {
  byId("trouble").textContent = text;
  byId("trouble").hidden = !text;
}
