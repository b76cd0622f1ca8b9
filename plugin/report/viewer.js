// The model to turn: flat triangles sorted by depth on a plain canvas. Data stands beside it in #model-data (viewer.py).
"use strict";
(() => {
  const held = JSON.parse(document.getElementById("model-data").textContent);
  const bytes = (text) => Uint8Array.from(atob(text), (c) => c.charCodeAt(0)).buffer;
  const points = new Float32Array(bytes(held.points)), normals = new Float32Array(bytes(held.normals));
  const triangles = new Int32Array(bytes(held.triangles)), surface = new Int32Array(bytes(held.surface));
  const edges = new Int32Array(bytes(held.edges)), colours = new Uint8Array(bytes(held.colours));
  const levels = held.levels.map((text) => new Int16Array(bytes(text)));
  const canvas = document.getElementById("model"), reading = document.getElementById("reading");
  const pen = canvas.getContext("2d");
  const INK = "#1f2a30", QUIET = "#56646c", BAR = 190, LIFT = 2e-3 * held.radius;
  const count = triangles.length / 3, lines = edges.length / 2;
  const flat = new Float32Array(points.length); // across, up, depth of every point
  let line = 0, zoom = 1, shown = [];
  let turn = Math.atan2(held.from[1], held.from[0]);
  let tilt = Math.asin(held.from[2] / Math.hypot(...held.from));

  // right, up, towards the viewer; z stays upright
  const axes = () => {
    const c = Math.cos(turn), s = Math.sin(turn), h = Math.cos(tilt), v = Math.sin(tilt);
    return [[-s, c, 0], [-c * v, -s * v, h], [c * h, s * h, v]];
  };
  const dot = (a, x, y, z) => a[0] * x + a[1] * y + a[2] * z;
  const scale = () => zoom * 0.47 * Math.min(canvas.width - BAR, canvas.height) / held.radius;
  const place = (across, up) => [(canvas.width - BAR) / 2 + across * scale(), canvas.height / 2 - up * scale()];

  const colour = (level) => {
    const part = (level - held.limits[0]) / (held.limits[1] - held.limits[0]);
    const at = 3 * Math.max(0, Math.min(255, Math.round(255 * part)));
    return `rgb(${colours[at]},${colours[at + 1]},${colours[at + 2]})`;
  };

  const project = (frame) => {
    for (let i = 0; i < points.length; i += 3) {
      const [x, y] = place(dot(frame[0], points[i], points[i + 1], points[i + 2]), dot(frame[1], points[i], points[i + 1], points[i + 2]));
      flat[i] = x; flat[i + 1] = y; flat[i + 2] = dot(frame[2], points[i], points[i + 1], points[i + 2]);
    }
  };

  const path = (...corners) => {
    pen.beginPath();
    corners.forEach((k, i) => (i ? pen.lineTo(flat[3 * k], flat[3 * k + 1]) : pen.moveTo(flat[3 * k], flat[3 * k + 1])));
  };

  const draw = () => {
    const frame = axes();
    pen.fillStyle = "white"; pen.fillRect(0, 0, canvas.width, canvas.height);
    project(frame);
    outline(QUIET, 0.7);
    shown = [];
    const items = [];
    for (let t = 0; t < count; t++) {
      if (dot(frame[2], normals[3 * t], normals[3 * t + 1], normals[3 * t + 2]) >= 0) continue; // it turns its back
      items.push([(flat[3 * triangles[3 * t] + 2] + flat[3 * triangles[3 * t + 1] + 2] + flat[3 * triangles[3 * t + 2] + 2]) / 3, t]);
    }
    for (let e = 0; e < lines; e++) items.push([(flat[3 * edges[2 * e] + 2] + flat[3 * edges[2 * e + 1] + 2]) / 2 + LIFT, -1 - e]);
    items.sort((a, b) => a[0] - b[0]);
    for (const [, item] of items) item < 0 ? edge(-1 - item, INK, 1.3) : triangle(item);
    receivers(frame); legend(); cross(frame);
    canvas.dataset.drawn = String(shown.length);
  };

  const triangle = (t) => {
    path(triangles[3 * t], triangles[3 * t + 1], triangles[3 * t + 2]);
    pen.closePath();
    pen.fillStyle = pen.strokeStyle = colour(levels[line][t] / 100);
    pen.lineWidth = 1; pen.fill(); pen.stroke(); // the stroke closes the seam to its neighbours
    shown.push(t);
  };
  const edge = (e, ink, width) => { path(edges[2 * e], edges[2 * e + 1]); pen.strokeStyle = ink; pen.lineWidth = width; pen.stroke(); };
  const outline = (ink, width) => { for (let e = 0; e < lines; e++) edge(e, ink, width); };

  const write = (text, x, y, align, ink = INK, size = 20) => {
    pen.font = `${size}px "DejaVu Sans", Verdana, sans-serif`;
    pen.textAlign = align; pen.textBaseline = "middle"; pen.fillStyle = ink; pen.fillText(text, x, y);
  };

  const receivers = (frame) => {
    held.receivers.forEach((receiver, i) => {
      const [x, y] = place(dot(frame[0], ...receiver.at), dot(frame[1], ...receiver.at));
      pen.beginPath(); pen.arc(x, y, 6, 0, 7); pen.fillStyle = INK; pen.fill(); pen.strokeStyle = "white"; pen.lineWidth = 2; pen.stroke();
      pen.font = "19px sans-serif";
      const beside = i % 2 ? -12 : 12, width = pen.measureText(receiver.name).width + 26;
      pen.fillStyle = "rgba(255,255,255,0.85)"; pen.fillRect(i % 2 ? x - width - 4 : x + 6, y - 13, width, 26);
      write(receiver.name, x + beside, y, i % 2 ? "right" : "left", INK, 19);
    });
  };

  const legend = () => {
    const left = canvas.width - BAR + 40, top = 90, high = canvas.height - 160, [low, up] = held.limits;
    for (let i = 0; i < high; i++) { pen.fillStyle = colour(up - ((up - low) * i) / high); pen.fillRect(left, top + i, 26, 1.5); }
    pen.strokeStyle = QUIET; pen.lineWidth = 1; pen.strokeRect(left, top, 26, high);
    for (let level = Math.ceil(low / 5) * 5; level <= up + 1e-6; level += 5) {
      const y = top + (high * (up - level)) / (up - low);
      pen.beginPath(); pen.moveTo(left + 26, y); pen.lineTo(left + 33, y); pen.strokeStyle = QUIET; pen.stroke();
      write(String(level), left + 40, y, "left");
    }
    write(held.unit, canvas.width - 6, 26, "right", QUIET, 18);
    write(held.lines[line], canvas.width - 6, 56, "right", INK, 22);
  };

  const cross = (frame) => {
    ["x", "y", "z"].forEach((name, i) => {
      const x = 70 + 42 * frame[0][i], y = canvas.height - 70 - 42 * frame[1][i];
      pen.beginPath(); pen.moveTo(70, canvas.height - 70); pen.lineTo(x, y); pen.strokeStyle = QUIET; pen.lineWidth = 2; pen.stroke();
      write(name, 70 + 58 * frame[0][i], canvas.height - 70 - 58 * frame[1][i], "center", QUIET, 18);
    });
  };

  // the nearest wall under the pointer
  const under = (x, y) => {
    const side = (a, b) => (flat[3 * b] - flat[3 * a]) * (y - flat[3 * a + 1]) - (flat[3 * b + 1] - flat[3 * a + 1]) * (x - flat[3 * a]);
    for (let i = shown.length - 1; i >= 0; i--) {
      const [a, b, c] = triangles.subarray(3 * shown[i], 3 * shown[i] + 3);
      const signs = [side(a, b), side(b, c), side(c, a)];
      if (signs.every((s) => s >= 0) || signs.every((s) => s <= 0)) return shown[i];
    }
    return -1;
  };
  const read = (event) => {
    const box = canvas.getBoundingClientRect();
    const t = under(((event.clientX - box.left) * canvas.width) / box.width, ((event.clientY - box.top) * canvas.height) / box.height);
    const name = t < 0 ? "" : surface[t] < 0 ? held.unnamed : held.names[surface[t]];
    reading.textContent = t < 0 ? "" : `${name}: ${(levels[line][t] / 100).toFixed(1)} dB at ${held.lines[line]}. `;
  };

  let pending = false;
  const later = () => { if (!pending) { pending = true; requestAnimationFrame(() => { pending = false; draw(); }); } };
  const move = (dx, dy) => { turn -= dx; tilt = Math.max(-1.5, Math.min(1.5, tilt + dy)); later(); };
  const nearer = (factor) => { zoom = Math.max(0.3, Math.min(8, zoom * factor)); later(); };
  let at = null;
  canvas.addEventListener("pointerdown", (event) => { at = [event.clientX, event.clientY]; canvas.setPointerCapture(event.pointerId); });
  canvas.addEventListener("pointermove", (event) => {
    if (!at) return read(event);
    move((event.clientX - at[0]) / 150, (event.clientY - at[1]) / 150);
    at = [event.clientX, event.clientY];
  });
  canvas.addEventListener("pointerup", () => { at = null; });
  canvas.addEventListener("pointercancel", () => { at = null; });
  canvas.addEventListener("wheel", (event) => { event.preventDefault(); nearer(Math.exp(-event.deltaY / 600)); }, { passive: false });
  const keys = { ArrowLeft: [-0.1, 0], ArrowRight: [0.1, 0], ArrowUp: [0, -0.1], ArrowDown: [0, 0.1] };
  canvas.addEventListener("keydown", (event) => {
    if (keys[event.key]) { event.preventDefault(); move(...keys[event.key]); }
    if (event.key === "+" || event.key === "-") nearer(event.key === "+" ? 1.15 : 1 / 1.15);
  });
  document.querySelectorAll("input[name=line]").forEach((choice) => {
    choice.addEventListener("change", () => { line = Number(choice.value); draw(); });
  });
  draw();
})();
