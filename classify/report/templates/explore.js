(() => {
  "use strict";
  const root = document.getElementById("explorer");
  const data = JSON.parse(document.getElementById("explorer-data").textContent);
  const stage = root.querySelector(".stage"), sheet = root.querySelector(".sheet"), canvas = root.querySelector("canvas");
  const say = root.querySelector(".chosen"), list = root.querySelector(".points");
  const token = name => getComputedStyle(document.documentElement).getPropertyValue("--" + name).trim();
  const ink = token("ink"), paper = token("paper"), right = token("accent"), wrong = token("second");
  let zoom = 1, x = 0, y = 0, chosen = null, waiting = false;
  const shown = { right: true, wrong: true };

  for (const layer of data.layers) {
    const image = new Image();
    // Layers that the page already shows as figures are not stored twice.
    image.src = layer.src || document.querySelector("#figure-" + layer.figure + " image").getAttribute("href");
    image.alt = "";
    image.draggable = false;
    image.dataset.layer = layer.kind;
    sheet.append(image);
    const control = root.querySelector(`[data-control="${layer.kind}"]`);
    const [box, slider] = control.querySelectorAll("input");
    const apply = () => { image.style.opacity = box.checked ? slider.value / 100 : 0; slider.disabled = !box.checked; };
    box.addEventListener("change", apply);
    slider.addEventListener("input", apply);
    apply();
  }

  function draw() {
    waiting = false;
    sheet.style.transform = `translate(${x}px, ${y}px) scale(${zoom})`;
    const ratio = window.devicePixelRatio || 1, w = stage.clientWidth, h = stage.clientHeight;
    if (canvas.width !== Math.round(w * ratio) || canvas.height !== Math.round(h * ratio)) {
      canvas.width = Math.round(w * ratio);
      canvas.height = Math.round(h * ratio);
    }
    const pen = canvas.getContext("2d");
    pen.setTransform(ratio, 0, 0, ratio, 0, 0);
    pen.clearRect(0, 0, w, h);
    for (const front of [false, true]) for (const p of data.points) {
      const [, down, across, mapped, found] = p, ok = mapped === found;
      const picked = chosen !== null && mapped === chosen[0] && found === chosen[1];
      if (picked !== front || !(picked || shown[ok ? "right" : "wrong"])) continue;
      const px = across * w * zoom + x, py = down * h * zoom + y, r = picked ? 6 : 4;
      if (px < -9 || py < -9 || px > w + 9 || py > h + 9) continue;
      pen.globalAlpha = chosen === null || picked ? 1 : 0.3;
      pen.beginPath();
      if (ok) pen.arc(px, py, r, 0, 7);
      else { pen.moveTo(px, py - r - 1); pen.lineTo(px + r + 1, py); pen.lineTo(px, py + r + 1); pen.lineTo(px - r - 1, py); pen.closePath(); }
      pen.fillStyle = ok ? right : wrong;
      pen.fill();
      pen.lineWidth = picked ? 2.2 : 1.2;
      pen.strokeStyle = picked ? ink : paper;
      pen.stroke();
    }
    pen.globalAlpha = 1;
  }
  const redraw = () => { if (!waiting) { waiting = true; requestAnimationFrame(draw); } };

  function clamp() {
    const w = stage.clientWidth, h = stage.clientHeight;
    x = Math.min(0, Math.max(w - w * zoom, x));
    y = Math.min(0, Math.max(h - h * zoom, y));
  }
  function zoomBy(factor, cx = stage.clientWidth / 2, cy = stage.clientHeight / 2) {
    const next = Math.min(40, Math.max(1, zoom * factor));
    x = cx - (cx - x) * next / zoom;
    y = cy - (cy - y) * next / zoom;
    zoom = next;
    sheet.classList.toggle("near", zoom > 2);
    clamp(); redraw();
  }
  function moveBy(dx, dy) { x += dx; y += dy; clamp(); redraw(); }

  let last = null;
  stage.addEventListener("pointerdown", e => { if (e.target.closest(".zoom")) return; last = [e.clientX, e.clientY]; stage.setPointerCapture(e.pointerId); });
  stage.addEventListener("pointermove", e => {
    if (last === null) return;
    moveBy(e.clientX - last[0], e.clientY - last[1]);
    last = [e.clientX, e.clientY];
  });
  for (const end of ["pointerup", "pointercancel"]) stage.addEventListener(end, () => { last = null; });
  stage.addEventListener("wheel", e => {
    // Only with a modifier or when already zoomed in: the page itself must stay scrollable.
    if (zoom === 1 && !e.ctrlKey && e.deltaY > 0) return;
    e.preventDefault();
    const frame = stage.getBoundingClientRect();
    zoomBy(Math.exp(-e.deltaY / 400), e.clientX - frame.left, e.clientY - frame.top);
  }, { passive: false });
  stage.addEventListener("keydown", e => {
    const step = 60, keys = {
      ArrowLeft: () => moveBy(step, 0), ArrowRight: () => moveBy(-step, 0), ArrowUp: () => moveBy(0, step),
      ArrowDown: () => moveBy(0, -step), "+": () => zoomBy(1.5), "=": () => zoomBy(1.5), "-": () => zoomBy(1 / 1.5),
      0: () => zoomBy(1 / zoom),
    };
    if (keys[e.key]) { e.preventDefault(); keys[e.key](); }
  });
  root.querySelector("[data-zoom=in]").addEventListener("click", () => zoomBy(1.5));
  root.querySelector("[data-zoom=out]").addEventListener("click", () => zoomBy(1 / 1.5));
  root.querySelector("[data-zoom=all]").addEventListener("click", () => zoomBy(1 / zoom));
  for (const box of root.querySelectorAll("[data-points]"))
    box.addEventListener("change", () => { shown[box.dataset.points] = box.checked; redraw(); });

  function choose(pair) {
    chosen = pair;
    for (const button of document.querySelectorAll("button.cell"))
      button.setAttribute("aria-pressed", String(pair !== null && button.dataset.pair === pair.join()));
    const found = pair === null ? [] : data.points.filter(p => p[3] === pair[0] && p[4] === pair[1]);
    say.textContent = pair === null ? data.words.none : data.words.chosen
      .replace("{count}", found.length).replace("{map}", () => data.classes[pair[0]]).replace("{found}", () => data.classes[pair[1]]);
    list.textContent = found.map(p => p[0]).join(", ");
    root.querySelector("[data-clear]").hidden = pair === null;
    root.querySelector("[data-matrix]").hidden = pair === null;
    redraw();
  }
  root.querySelector("[data-clear]").addEventListener("click", () => choose(null));
  const matrix = document.getElementById("table-matrix_counts");
  if (matrix !== null && data.points.length) {
    const rows = [...matrix.tBodies[0].rows].slice(0, -1);
    rows.forEach((row, i) => [...row.cells].slice(1, -1).forEach((cell, j) => {
      if (cell.classList.contains("nil")) return;
      const button = document.createElement("button");
      button.type = "button";
      button.className = "cell";
      button.dataset.pair = `${i},${j}`;
      button.textContent = cell.textContent;
      button.setAttribute("aria-pressed", "false");
      button.title = data.words.cell.replace("{map}", () => data.classes[i]).replace("{found}", () => data.classes[j]);
      button.addEventListener("click", () => {
        const same = button.getAttribute("aria-pressed") === "true";
        choose(same ? null : [i, j]);
        if (!same) root.scrollIntoView({ block: "center", behavior: matchMedia("(prefers-reduced-motion: reduce)").matches ? "auto" : "smooth" });
      });
      cell.replaceChildren(button);
    }));
  }
  root.hidden = false;
  new ResizeObserver(() => { clamp(); redraw(); }).observe(stage);
  choose(null);
})();
