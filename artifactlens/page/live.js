"use strict";
// Asks for the state twice a second and puts what changed into its place. All text is
// escaped by the sender; this script alone may run here.
const EVERY = 500; // ms
const OLD = 3000; // ms without news until the page says that it is old
const EMPTY = 30000; // ms for which a row tells of what has left it

const at = (id) => document.getElementById(id);
const rows = [...at("rows").children];
let slots = []; // what stands in each row: {key, name, html}, or {left: when, name: what left}
let heard = performance.now();
let refused = "";
let now = null;

const shown = new Map(); // the browser writes markup in its own way, so what was put is kept
const put = (place, name, html) => {
  if (shown.get(name) === html) return;
  shown.set(name, html);
  place.innerHTML = html;
};
const say = (id, words) => {
  if (at(id).textContent !== words) at(id).textContent = words;
};

// Entries stand in order of number, and each keeps its row as far as that order allows.
const arrange = (keys) => {
  let free = 0;
  return keys.map((key, index) => {
    const before = slots.findIndex((slot) => slot?.key === key);
    const row = Math.min(Math.max(free, before), rows.length - keys.length + index);
    free = row + 1;
    return row;
  });
};

const list = (entries) => {
  const time = performance.now();
  const keys = entries.map((entry) => entry.key);
  slots = slots.filter((slot) => !(slot.left && time - slot.left > EMPTY));
  const places = arrange(keys);
  slots = slots.map((slot) => {
    if (keys.includes(slot.key)) return { left: time, name: "" }; // and goes to its place below
    return slot.left ? slot : { left: time, name: slot.name };
  });
  places.forEach((row, index) => (slots[row] = entries[index]));
  rows.forEach((row, index) => {
    const slot = slots[index];
    if (slot?.key) return put(row, index, slot.html);
    put(row, index, slot?.name ? '<p class="gone"></p>' : "");
    if (slot?.name) row.firstChild.textContent = `${slot.name}: no longer on the list`;
  });
};

const show = (state) => {
  document.body.dataset.phase = state.phase;
  document.body.classList.toggle("asking", Boolean(state.prompt));
  at("prompt").hidden = !state.prompt;
  if (state.prompt) {
    for (const id of ["words", "left", "step"]) say(id, state.prompt[id]);
  }
  for (const [id, html] of Object.entries(state.parts)) put(at(id), id, html);
  say("further", state.further);
  list(state.rows);
};

const judge = () => {
  const silent = performance.now() - heard > OLD;
  const cut = silent || Boolean(refused); // whatever the stream does, nothing is known of it
  document.body.classList.toggle("old", cut || Boolean(now?.old));
  if (!cut && !now) return;
  const last = now ? ` The last that was seen is of ${now.time}.` : "";
  say("sentence", cut ? refused || "artifactlens does not answer." : now.sentence);
  say("more", cut ? `What stands below is old.${last}` : now.more);
  document.title = `${at("sentence").textContent} - artifactlens watch`;
};

const ask = async () => {
  const reply = await fetch("/now", { cache: "no-store", signal: AbortSignal.timeout(OLD) });
  refused = reply.ok ? "" : await reply.text();
  if (!reply.ok) return;
  now = await reply.json();
  heard = performance.now();
  show(now);
};

const turn = async () => {
  await ask().catch(() => {}); // what fails shows as silence
  judge();
  setTimeout(turn, EVERY);
};
setInterval(judge, EVERY);
turn();
