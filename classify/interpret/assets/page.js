// The page: one point at a time, a choice, and a save that is believed only when the server has said so.

import { Silence, get, post } from "./talk.js";
import { drawSpectrum } from "./spectrum.js";
import { centre, nudge, setUpViews, showPoint, stretch, warmUp, zoom } from "./views.js";

const $ = (id) => document.getElementById(id);
const LETTERS = "rtyuiopghjklasdfbm";
const CONFIDENCE_KEYS = "qwe";
const UNTOLD = "\u0000";

let start = null;
let points = [];
let at = 0;
let choice = null;
let current = null;
let busy = false;
const known = new Map();

// Classes beyond the keys are reached with Tab and chosen with Enter.
const keyOf = (i) => (i < 9 ? String(i + 1) : LETTERS[i - 9] ?? "");
const empty = () => ({ label: null, untold: false, alternate: null, confidence: "high", note: "" });

function say(text, kind = "") {
  $("status").textContent = text;
  $("status").className = `status ${kind}`;
}

function button(attributes, ...content) {
  const made = document.createElement("button");
  made.type = "button";
  for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
  made.append(...content);
  return made;
}

function tag(name, text, className) {
  const made = document.createElement(name);
  if (text) made.textContent = text;
  if (className) made.className = className;
  return made;
}

function swatch(colour) {
  const svg = document.createElementNS("http://www.w3.org/2000/svg", "svg");
  svg.setAttribute("class", "swatch");
  svg.setAttribute("viewBox", "0 0 16 16");
  svg.setAttribute("aria-hidden", "true");
  const shape = document.createElementNS("http://www.w3.org/2000/svg", colour ? "rect" : "path");
  const drawn = colour ? { width: 16, height: 16, fill: colour } : { d: "M2 14L14 2", "stroke-width": 2 };
  for (const [key, value] of Object.entries(drawn)) shape.setAttribute(key, value);
  svg.append(shape);
  return svg;
}

function build() {
  $("title").textContent = start.title;
  $("who").textContent = start.role === "settling" ? `${start.interpreter}, settling` : start.interpreter;
  document.title = `Reference points: ${start.title}`;
  const made = start.classes.map((c, i) => {
    const b = button({ role: "radio", "data-name": c.name }, tag("kbd", keyOf(i)), swatch(c.colour), tag("span", c.name),
      tag("span", "", "also"));
    b.addEventListener("click", (event) => (event.shiftKey ? setAlternate(c.name) : setLabel(c.name)));
    return b;
  });
  const untold = button({ role: "radio", "data-name": UNTOLD }, tag("kbd", "0"), swatch(null), tag("span", "Cannot tell"),
    tag("span", "", "also"));
  untold.addEventListener("click", setUntold);
  $("classes").replaceChildren(...made, untold);
  $("alternate").replaceChildren(new Option("nothing else", ""), ...start.classes.map((c) => new Option(c.name, c.name)));
  $("confidence").replaceChildren(...start.confidences.map((c, i) => {
    const b = button({ role: "radio", "data-confidence": c }, `${c} `, tag("kbd", CONFIDENCE_KEYS[i]));
    b.addEventListener("click", () => setConfidence(c));
    return b;
  }));
}

function show() {
  for (const b of $("classes").children) {
    const name = b.dataset.name;
    const chosen = name === UNTOLD ? choice.untold : choice.label === name;
    b.setAttribute("aria-checked", String(chosen));
    b.lastChild.textContent = choice.alternate === name ? "also fits" : "";
  }
  $("alternate").value = choice.alternate ?? "";
  $("alternate").disabled = choice.label === null;
  for (const b of $("confidence").children) b.setAttribute("aria-checked", String(b.dataset.confidence === choice.confidence));
  if ($("note").value !== choice.note) $("note").value = choice.note;
  $("save").disabled = choice.label === null && !choice.untold;
}

function setLabel(name) {
  choice.label = name;
  choice.untold = false;
  if (choice.alternate === name) choice.alternate = null;
  say("");
  show();
}

function setAlternate(name) {
  if (choice.label === null) return say("Choose the class that fits best first.");
  if (name === choice.label) return say("That is the first label already.");
  choice.alternate = choice.alternate === name ? null : name;
  show();
}

function setUntold() {
  Object.assign(choice, { label: null, untold: true, alternate: null });
  say("");
  show();
}

function setConfidence(value) {
  choice.confidence = value;
  show();
}

function progress() {
  const done = points.filter((p) => p.state !== "open").length;
  $("bar").max = Math.max(points.length, 1);
  $("bar").value = done;
  $("count").textContent = `${done} of ${points.length}`;
  return done;
}

async function load(id) {
  if (!known.has(id)) {
    const { status, body } = await get(`/api/point/${id}`);
    if (status !== 200) throw new Error(body.problem);
    known.set(id, body);
  }
  return known.get(id);
}

async function open(index) {
  at = (index + points.length) % points.length;
  const wanted = points[at].id;
  const began = performance.now();
  try {
    const found = await load(wanted);
    if (points[at].id !== wanted) return;
    current = found;
  } catch (error) {
    return say(error instanceof Silence ? "The server does not answer. Nothing is lost; start it again." : error.message, "bad");
  }
  const said = current.said;
  choice = said ? { ...empty(), ...said, untold: said.label === null } : empty();
  $("point").textContent = `Point ${current.id}`;
  const [north, east] = [current.latitude, current.longitude];
  $("place").textContent = `${Math.abs(north).toFixed(5)}° ${north < 0 ? "S" : "N"}, `
    + `${Math.abs(east).toFixed(5)}° ${east < 0 ? "W" : "E"}`;
  $("originals").hidden = !current.originals;
  $("originals").replaceChildren(...(current.originals ?? []).map((o) => {
    const also = o.alternate ? `, or ${o.alternate}` : "";
    const note = o.note ? ` “${o.note}”` : "";
    return tag("p", `${o.interpreter}: ${o.label ?? "cannot tell"}${also} (${o.confidence ?? "not yet"})${note}`);
  }));
  show();
  drawSpectrum($("spectrum"), current.spectrum);
  await showPoint(current.id);
  document.body.dataset.ready = String(current.id);
  document.body.dataset.took = (performance.now() - began).toFixed(1);
  prepare();
}

function nextOpen() {
  for (let i = 1; i <= points.length; i += 1) {
    const index = (at + i) % points.length;
    if (points[index].state === "open") return index;
  }
  return -1;
}

// The next point is fetched while this one is looked at.
function prepare() {
  const next = nextOpen();
  if (next < 0 || next === at) return;
  const id = points[next].id;
  load(id).then(() => warmUp(id)).catch(() => {});
}

async function save() {
  if (busy || choice === null || (choice.label === null && !choice.untold)) return;
  busy = true;
  const id = current.id;
  const sent = { label: choice.label, alternate: choice.alternate, confidence: choice.confidence, note: choice.note,
    seen: current.revision };
  try {
    const { status, body } = await post(`/api/label/${id}`, sent);
    if (status === 409) {
      current.revision = body.revision;
      current.said = body.said;
      const other = body.said === null ? "taken back" : `labelled ${body.said.label ?? "cannot tell"}`;
      say(`Not saved: this point was ${other} elsewhere in between. Press Space to put your label in its place, `
        + "or go on to keep the other.", "bad");
      return;
    }
    if (status !== 200) return say(`Not saved: ${body.problem}`, "bad");
    Object.assign(points[at], { state: sent.label === null ? "untold" : "done", label: sent.label });
    const { seen, ...said } = sent;
    Object.assign(current, { revision: body.revision, said });
    const done = progress();
    document.body.dataset.saved = String(id);
    say(done === points.length ? `Saved point ${id}. All points are labelled: thank you.` : `Saved point ${id}.`, "good");
    const next = nextOpen();
    if (next >= 0) await open(next);
  } catch (error) {
    if (!(error instanceof Silence)) throw error;
    say("Not saved: the server does not answer. Your choice is kept here; start it again and open its new address.", "bad");
  } finally {
    busy = false;
  }
}

async function undo() {
  if (busy) return;
  busy = true;
  try {
    const { body } = await post("/api/undo");
    if (body.point === null) return say("There is nothing to take back.");
    known.delete(body.point);
    const index = points.findIndex((p) => p.id === body.point);
    if (index >= 0) {
      const { said, revision } = await load(body.point);
      const state = said === null ? "open" : said.label === null ? "untold" : "done";
      Object.assign(points[index], { state, label: said?.label ?? null, revision });
      progress();
      await open(index);
    }
    say(`Took back the label of point ${body.point}.`, "good");
  } catch (error) {
    if (!(error instanceof Silence)) throw error;
    say("The server does not answer. Nothing is lost; start it again.", "bad");
  } finally {
    busy = false;
  }
}

async function refreshPoints() {
  const { body } = await get("/api/points");
  points = body.points;
  progress();
}

function chosenByKey(event) {
  // The key's place rather than its character: with Shift, digits give other characters on every keyboard.
  const digit = /^(?:Digit|Numpad)([1-9])$/.exec(event.code);
  const place = digit ? Number(digit[1]) - 1 : 9 + LETTERS.indexOf(event.key.toLowerCase());
  const fits = digit || LETTERS.includes(event.key.toLowerCase());
  return fits && event.key.length === 1 && place < start.classes.length ? start.classes[place].name : null;
}

const KEYS = {
  " ": save, z: undo, ",": () => open(at - 1), ".": () => open(at + 1), x: () => zoom(-1), c: () => zoom(1), v: centre,
  "+": () => zoom(1), "-": () => zoom(-1), 0: setUntold, "?": () => $("help").showModal(), n: () => $("note").focus(),
  ArrowUp: () => nudge(-1, 0), ArrowDown: () => nudge(1, 0), ArrowLeft: () => nudge(0, -1), ArrowRight: () => nudge(0, 1),
};

function onKey(event) {
  if (event.ctrlKey || event.metaKey || event.altKey || $("help").open || choice === null) return;
  const field = event.target;
  if (field === $("note")) {
    if (event.key === "Escape" || event.key === "Enter") { field.blur(); event.preventDefault(); }
    return;
  }
  const sliding = field.matches("input[type=range], select") && (event.key.startsWith("Arrow") || event.key === " ");
  const ticking = field.matches("input[type=checkbox], .tools button, header button, .dates button, .pair button");
  if (sliding || (ticking && (event.key === " " || event.key === "Enter"))) return;
  const name = chosenByKey(event);
  const confidence = CONFIDENCE_KEYS.indexOf(event.key.toLowerCase());
  if (name !== null) (event.shiftKey ? setAlternate : setLabel)(name);
  else if (confidence >= 0 && event.key.length === 1) setConfidence(start.confidences[confidence]);
  else if (KEYS[event.key]) KEYS[event.key]();
  else return;
  event.preventDefault();
}

function listen() {
  document.addEventListener("keydown", onKey);
  const pairs = { save, undo, back: () => open(at - 1), forward: () => open(at + 1), in: () => zoom(1), out: () => zoom(-1),
    centre, "help-open": () => $("help").showModal() };
  for (const [id, action] of Object.entries(pairs)) $(id).addEventListener("click", action);
  const stretched = () => stretch(Number($("low").value), Number($("high").value), $("local").checked);
  for (const id of ["low", "high", "local"]) $(id).addEventListener("input", stretched);
  $("alternate").addEventListener("change", () => { choice.alternate = $("alternate").value || null; show(); });
  $("note").addEventListener("input", () => { choice.note = $("note").value; });
  window.addEventListener("resize", () => current && drawSpectrum($("spectrum"), current.spectrum));
}

async function begin() {
  const first = await get("/api/start");
  if (first.status !== 200) throw new Error(first.body.problem);
  start = first.body;
  build();
  await refreshPoints();
  if (points.length === 0) throw new Error("There are no points to label here.");
  $("main").hidden = false;
  setUpViews(start, (look, sides) => {
    $("width").textContent = `${look.side} pixels across`;
    $("in").disabled = look.side === sides[0];
    $("out").disabled = look.side === sides.at(-1);
  });
  listen();
  at = points.length - 1;
  const next = nextOpen();
  await open(next < 0 ? 0 : next);
}

begin().catch((error) => {
  $("closed").hidden = false;
  $("closed").textContent = error.message;
});
