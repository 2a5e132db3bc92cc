// Pictures of the scene around a point: how wide, how far moved, how stretched, and the outline of the pixel.

const look = { side: 31, down: 0, right: 0, low: 2, high: 98, local: false };
let sides = [31];
let views = [];
let date = "";
let point = null;
let changed = () => {};
const frames = new Map();

export function setUpViews(start, onChange) {
  sides = start.sides_px;
  views = start.views;
  date = views[0].date;
  changed = onChange;
  drawDates();
  build();
}

export function pictureAddress(id, view, fresh = false) {
  const l = fresh ? { ...look, down: 0, right: 0 } : look;
  const query = new URLSearchParams({ side: l.side, down: l.down, right: l.right, low: l.low, high: l.high,
    local: l.local ? 1 : 0 });
  return `/api/picture/${id}/${view.key}?${query}`;
}

const shown = () => views.filter((v) => v.date === date);

export function showPoint(id) {
  point = id;
  look.down = 0;
  look.right = 0;
  return refresh();
}

export function warmUp(id) {
  for (const view of shown()) new Image().src = pictureAddress(id, view, true);
}

export function zoom(by) {
  const next = sides.indexOf(look.side) - by;
  if (next < 0 || next >= sides.length) return;
  look.side = sides[next];
  refresh();
}

export function move(down, right) {
  const far = 512;
  look.down = Math.max(-far, Math.min(far, look.down + down));
  look.right = Math.max(-far, Math.min(far, look.right + right));
  refresh();
}

export const nudge = (down, right) => move(down * Math.ceil(look.side / 8), right * Math.ceil(look.side / 8));

export function centre() {
  look.down = 0;
  look.right = 0;
  refresh();
}

export function stretch(low, high, local) {
  Object.assign(look, { low, high, local });
  refresh();
}

function drawDates() {
  const dates = [...new Set(views.map((v) => v.date))];
  const holder = document.getElementById("dates");
  holder.hidden = dates.length < 2;
  holder.replaceChildren(...dates.map((d) => {
    const button = document.createElement("button");
    button.textContent = d || "main date";
    button.setAttribute("aria-pressed", String(d === date));
    button.addEventListener("click", () => { date = d; drawDates(); build(); refresh(); });
    return button;
  }));
}

function build() {
  frames.clear();
  document.getElementById("pictures").replaceChildren(...shown().map((view) => {
    const figure = document.createElement("figure");
    const caption = document.createElement("figcaption");
    const bands = document.createElement("span");
    bands.textContent = view.bands.join(", ").replaceAll("_", " ");
    caption.append(view.title, bands);
    const frame = document.createElement("div");
    frame.className = "frame";
    const image = document.createElement("img");
    image.alt = `${view.title} around the point`;
    image.draggable = false;
    const outline = document.createElementNS("http://www.w3.org/2000/svg", "svg");
    outline.setAttribute("aria-hidden", "true");
    frame.append(image, outline);
    figure.append(caption, frame);
    grab(frame);
    frames.set(view.key, { image, outline, view });
    return figure;
  }));
}

function grab(frame) {
  let from = null;
  frame.addEventListener("pointerdown", (event) => {
    from = { x: event.clientX, y: event.clientY };
    frame.setPointerCapture(event.pointerId);
    frame.classList.add("moving");
  });
  frame.addEventListener("pointerup", (event) => {
    if (!from) return;
    const px = frame.clientWidth / look.side;
    const right = Math.round((from.x - event.clientX) / px);
    const down = Math.round((from.y - event.clientY) / px);
    from = null;
    frame.classList.remove("moving");
    if (right || down) move(down, right);
  });
  frame.addEventListener("wheel", (event) => {
    event.preventDefault();
    zoom(event.deltaY < 0 ? 1 : -1);
  }, { passive: false });
}

function outlineOf(svg) {
  const half = Math.floor(look.side / 2);
  const [x, y] = [half - look.right, half - look.down];
  svg.setAttribute("viewBox", `0 0 ${look.side} ${look.side}`);
  const [near, far] = [0.5 + look.side * 0.03, 0.5 + look.side * 0.075];
  const [cx, cy] = [x + 0.5, y + 0.5];
  const ticks = [[1, 0], [-1, 0], [0, 1], [0, -1]]
    .map(([a, b]) => `M${cx + a * near} ${cy + b * near}L${cx + a * far} ${cy + b * far}`).join("");
  // Light inside dark, so that the outline is seen on any ground; ticks lead to it where pixels are small.
  svg.replaceChildren(...[["#10181c", 4.5], ["#ffffff", 2]].map(([stroke, width]) => {
    const path = document.createElementNS("http://www.w3.org/2000/svg", "path");
    const drawn = { d: `M${x} ${y}h1v1h-1z${ticks}`, fill: "none", stroke, "stroke-width": width,
      "vector-effect": "non-scaling-stroke" };
    for (const [key, value] of Object.entries(drawn)) path.setAttribute(key, value);
    return path;
  }));
}

async function refresh() {
  if (point === null) return;
  changed(look, sides);
  await Promise.all([...frames.values()].map(async ({ image, outline, view }) => {
    const address = pictureAddress(point, view);
    if (image.getAttribute("src") !== address) image.src = address;
    outlineOf(outline);
    try {
      await image.decode();
    } catch {
      // A picture that was replaced before it came, or a server that went away: the label's own answer will tell.
    }
  }));
}
