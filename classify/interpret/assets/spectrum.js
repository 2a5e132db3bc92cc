// The spectrum at a point: one line per date, bands without a wavelength left out of the line and named below.

const NS = "http://www.w3.org/2000/svg";
const STROKES = ["#f0c566", "#8fd0e6", "#f2a487", "#b9d98b"];
const DASHES = ["", "7 4", "2 3", "9 3 2 3"];

function element(name, attributes, text) {
  const made = document.createElementNS(NS, name);
  for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
  if (text !== undefined) made.textContent = text;
  return made;
}

function step(span) {
  const power = 10 ** Math.floor(Math.log10(span / 3));
  return [1, 2, 5, 10].map((m) => m * power).find((s) => span / s <= 4.5);
}

export function drawSpectrum(holder, dates) {
  const width = Math.max(holder.clientWidth, 300);
  const height = Math.max(holder.clientHeight, 110);
  const known = dates.map((d) => d.bands.filter((b) => b.wavelength_nm !== null && b.value !== null));
  const all = known.flat();
  const svg = element("svg", { viewBox: `0 0 ${width} ${height}`, role: "img" });
  holder.replaceChildren(svg);
  if (all.length === 0) {
    svg.setAttribute("aria-label", "No reflectance at this point");
    svg.append(element("text", { x: 8, y: 24, fill: "#dfe6e4", "font-size": 13 }, "no valid reflectance here"));
    return;
  }
  const least = Math.min(...all.map((b) => b.wavelength_nm));
  const most = Math.max(...all.map((b) => b.wavelength_nm), least + 1);
  const top = Math.max(...all.map((b) => b.value), 0.1) * 1.12;
  const bottom = Math.min(...all.map((b) => b.value), 0);
  const x = (nm) => 42 + ((nm - least) / (most - least)) * (width - 62);
  const y = (value) => height - 22 - ((value - bottom) / (top - bottom)) * (height - 32);
  const by = step(top - bottom);
  for (let value = Math.ceil(bottom / by) * by; value <= top; value += by) {
    svg.append(element("line", { x1: 42, x2: width - 20, y1: y(value), y2: y(value), stroke: "#4a555a" }));
    svg.append(element("text", { x: 36, y: y(value) + 4, fill: "#dfe6e4", "font-size": 12, "text-anchor": "end" },
      Number(value.toPrecision(3)).toString()));
  }
  const words = [];
  known.forEach((bands, i) => {
    const stroke = STROKES[i % STROKES.length];
    const path = bands.map((b, j) => `${j ? "L" : "M"}${x(b.wavelength_nm).toFixed(1)} ${y(b.value).toFixed(1)}`).join("");
    svg.append(element("path", { d: path, fill: "none", stroke, "stroke-width": 2, "stroke-dasharray": DASHES[i % 4] }));
    for (const b of bands) {
      const mark = element("circle", { cx: x(b.wavelength_nm), cy: y(b.value), r: 3.5, fill: stroke });
      mark.append(element("title", {}, `${b.role}, ${b.wavelength_nm} nm: ${b.value}`));
      svg.append(mark);
    }
    words.push(`${dates[i].date || "spectrum"}: ${bands.map((b) => `${b.role} ${b.value}`).join(", ")}`);
    if (dates.length > 1) {
      svg.append(element("text", { x: width - 20, y: 14 + 15 * i, fill: stroke, "font-size": 12, "text-anchor": "end" },
        dates[i].date || "main date"));
    }
  });
  let last = -100;
  for (const nm of [...new Set(all.map((b) => b.wavelength_nm))].sort((a, b) => a - b)) {
    if (x(nm) - last < 34) continue;
    last = x(nm);
    svg.append(element("text", { x: last, y: height - 6, fill: "#dfe6e4", "font-size": 12, "text-anchor": "middle" }, nm));
  }
  svg.setAttribute("aria-label", words.join("; "));
}
