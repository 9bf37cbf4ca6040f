(function () {
"use strict";
const GREY = "#b9c1c6", ORANGE = "#D55E00";
// matplotlib's viridis (CC0) at nine steps.
const COLOURS = ["#440154", "#472d7b", "#3b528b", "#2c728e", "#21918c", "#28ae80", "#5ec962",
  "#addc30", "#fde725"];
const UNDEFINED = -0.06;
// Per view: the axis across and the axis down, as indices of x, y, z.
const VIEWS = { z: [0, 1], y: [0, 2], x: [2, 1] };
const byId = (id) => document.getElementById(id);

function made(tag, text, parent) {
  const element = document.createElement(tag);
  element.textContent = text;
  if (parent) parent.appendChild(element);
  return element;
}

function bytes(base64) {
  const text = atob(base64), out = new Uint8Array(text.length);
  for (let k = 0; k < text.length; k++) out[k] = text.charCodeAt(k);
  return out;
}

async function unpacked(id) {
  const stream = new Blob([bytes(byId(id).textContent)]).stream()
    .pipeThrough(new DecompressionStream("deflate"));
  return new Response(stream).text();
}

const numbers = (base64, Kind) => new Kind(bytes(base64).buffer);

function readable(value) {
  if (!Number.isFinite(value)) return "–";
  const size = Math.abs(value);
  if (value === 0 || (size >= 1e-3 && size < 1e5)) {
    return Number(value.toPrecision(size >= 100 ? 4 : 3)).toLocaleString("en", { maximumFractionDigits: 6 });
  }
  const power = Math.floor(Math.log10(size));
  const raised = String(power).replace("-", "⁻").replace(/\d/g, (d) => "⁰¹²³⁴⁵⁶⁷⁸⁹"[d]);
  const mantissa = Number((value / 10 ** power).toPrecision(3));
  return (mantissa === 1 ? "" : mantissa + " × ") + "10" + raised;
}

/* The graph's arrays, ready for use. */
function decoded(data) {
  const grid = numbers(data.position.data, Uint16Array), low = data.position.low;
  const points = Float64Array.from(grid, (g, k) => low[k % 3] + g * data.position.step);
  const count = numbers(data.count, Int32Array), first = [];
  let next = 0;
  count.forEach((n) => { first.push(next); next += n; });
  const segment = numbers(data.segment, Int32Array);
  const place = new Map();
  segment.forEach((id, k) => place.set(id, k));
  data.colours.forEach((c) => { if (c.values) c.values = numbers(c.values, Float32Array); });
  data.shown.forEach((s) => { s.values = numbers(s.values, Float32Array); });
  return { data, points, first, count, segment, place, radius: numbers(data.radius, Float32Array) };
}

function unit(v) {
  const length = Math.hypot(v[0], v[1], v[2]);
  return length > 0 ? v.map((c) => c / length) : [1, 0, 0];
}
const dot = (a, b) => a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
const cross = (a, b) =>
  [a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]];

/* Tubes of the vessels' own width as one triangle mesh; `owner` tells each vertex's vessel. */
function tubes(graph, which, sides, widen) {
  const mesh = { x: [], y: [], z: [], i: [], j: [], k: [], owner: [] };
  const um = graph.data.unit[1];
  const at = (p) => [0, 1, 2].map((k) => graph.points[3 * p + k] / um);
  const vertex = (v, owner) => {
    mesh.x.push(v[0]); mesh.y.push(v[1]); mesh.z.push(v[2]); mesh.owner.push(owner);
    return mesh.x.length - 1;
  };
  const triangle = (a, b, c) => { mesh.i.push(a); mesh.j.push(b); mesh.k.push(c); };
  for (const owner of which) {
    const start = graph.first[owner], n = graph.count[owner];
    let side = null, before = null;
    for (let p = start; p < start + n; p++) {
      const from = at(Math.max(p - 1, start)), to = at(Math.min(p + 1, start + n - 1));
      const along = unit([to[0] - from[0], to[1] - from[1], to[2] - from[2]]);
      if (!side) {
        const least = along.map(Math.abs).indexOf(Math.min(...along.map(Math.abs)));
        side = [0, 0, 0];
        side[least] = 1;
      }
      const lean = dot(side, along);
      side = unit(side.map((c, k) => c - lean * along[k]));
      const other = cross(along, side), centre = at(p), r = graph.radius[p] * widen / um;
      const ring = [];
      for (let s = 0; s < sides; s++) {
        const angle = 2 * Math.PI * s / sides, c = r * Math.cos(angle), d = r * Math.sin(angle);
        ring.push(vertex(centre.map((v, k) => v + c * side[k] + d * other[k]), owner));
      }
      if (p === start || p === start + n - 1) {
        const out = (p === start ? -0.3 : 0.3) * r;
        const middle = vertex(centre.map((v, k) => v + out * along[k]), owner);
        for (let s = 0; s < sides; s++) triangle(middle, ring[s], ring[(s + 1) % sides]);
      }
      if (before) {
        for (let s = 0; s < sides; s++) {
          const t = (s + 1) % sides;
          triangle(before[s], ring[s], ring[t]);
          triangle(before[s], ring[t], before[t]);
        }
      }
      before = ring;
    }
  }
  return mesh;
}

/* Colours of one quantity: a share from 0 to 1 for each vessel, below 0 where it has none. */
function shades(colour) {
  const scale = (v) => colour.log ? Math.log(v) : v;
  const low = scale(colour.low), span = scale(colour.high) - low;
  const share = (v) => span > 0 ? (scale(v) - low) / span : 0.5;
  const values = Array.from(colour.values, (v) =>
    Number.isFinite(v) ? Math.min(1, Math.max(0, share(v))) : UNDEFINED);
  const ticks = ticksOf(colour).map((v) => [share(v), readable(v)]);
  return { values, ticks, gaps: values.some((v) => v < 0) };
}

function ticksOf(colour) {
  const { low, high } = colour;
  if (!(high > low)) return [low];
  if (colour.name === "order") {
    return Array.from({ length: Math.round(high - low) + 1 }, (_, k) => low + k);
  }
  if (!colour.log) return [0, 0.25, 0.5, 0.75, 1].map((t) => low + t * (high - low));
  const found = [];
  for (let power = Math.floor(Math.log10(low)); power <= Math.log10(high); power++) {
    for (const step of [1, 2, 5]) {
      const value = step * 10 ** power;
      if (value >= low && value <= high) found.push(value);
    }
  }
  const every = Math.ceil(found.length / 8);
  const kept = found.filter((_, k) => k % every === 0);
  return kept.length > 1 ? kept : [low, high];
}

function painted(mesh, colour) {
  const { values, ticks, gaps } = shades(colour);
  const bottom = gaps ? UNDEFINED : 0, place = (t) => (t - bottom) / (1 - bottom);
  const scale = COLOURS.map((c, k) => [place(k / (COLOURS.length - 1)), c]);
  if (gaps) {
    scale.unshift([0, GREY], [place(-0.012), GREY]);
    scale[2][0] = place(-0.011);
    ticks.unshift([UNDEFINED + 0.02, "none"]);
  }
  const unitText = colour.unit ? " in " + colour.unit : "";
  return {
    intensity: mesh.owner.map((o) => values[o]), cmin: bottom, cmax: 1, colorscale: scale,
    colorbar: {
      title: { text: colour.label.split(" (")[0] + unitText, side: "right", font: { size: 13 } },
      thickness: 14, len: 0.85, tickvals: ticks.map((t) => t[0]), ticktext: ticks.map((t) => t[1]),
    },
  };
}

const distance = (a, b) => Math.hypot(a[0] - b[0], a[1] - b[1]);

/* The picked vessel in the projections, an outline at its measured width over the grey values. */
function cuts(graph, vessel, parent) {
  const images = graph.data.images, start = graph.first[vessel], n = graph.count[vessel];
  const spacing = [...graph.data.spacing_um].reverse();
  Object.keys(images).sort().reverse().forEach((view) => {
    const [across, down] = VIEWS[view], image = images[view];
    const line = [];
    for (let p = start; p < start + n; p++) {
      line.push([graph.points[3 * p + across], graph.points[3 * p + down], graph.radius[p]]);
    }
    const middle = [0, 1].map((k) =>
      (Math.min(...line.map((v) => v[k])) + Math.max(...line.map((v) => v[k]))) / 2);
    const reach = Math.max(...line.map((v) =>
      Math.max(Math.abs(v[0] - middle[0]), Math.abs(v[1] - middle[1])) + 3 * v[2]));
    const size = 250, canvas = made("canvas", "", parent);
    canvas.width = canvas.height = size;
    canvas.setAttribute("role", "img");
    canvas.setAttribute("aria-label", "The segment in the projection along " + view);
    const pen = canvas.getContext("2d"), scale = size / (2 * reach);
    const px = (v) => [(v[0] - middle[0] + reach) * scale, (v[1] - middle[1] + reach) * scale];
    pen.fillRect(0, 0, size, size);
    pen.imageSmoothingEnabled = false;
    // A projection is stored with its slower axis first; along x that is z, seen across.
    const turned = view === "x";
    const factor = turned ? image.every : [image.every[1], image.every[0]];
    const picture = drawnImage(image, turned);
    const corner = px([-0.5 * spacing[across], -0.5 * spacing[down]]);
    pen.drawImage(picture, corner[0], corner[1],
      picture.width * factor[0] * spacing[across] * scale,
      picture.height * factor[1] * spacing[down] * scale);
    pen.strokeStyle = ORANGE;
    pen.lineWidth = 2;
    const seen = line.reduce((sum, v, k) =>
      sum + (k ? Math.hypot(v[0] - line[k - 1][0], v[1] - line[k - 1][1]) : 0), 0);
    if (seen < 2 * line[0][2]) {  // it runs along the line of sight
      pen.beginPath();
      pen.arc(...px(line[n >> 1]), line[n >> 1][2] * scale, 0, 2 * Math.PI);
      pen.stroke();
    }
    for (const sign of seen < 2 * line[0][2] ? [] : [1, -1]) {
      pen.beginPath();
      line.forEach((v, k) => {
        const [a, b] = [-1, 1].map((way) => {
          let at = k;
          do at += way; while (line[at + way] && distance(line[at], v) < v[2]);
          return line[Math.min(Math.max(at, 0), n - 1)];
        });
        const length = Math.hypot(b[0] - a[0], b[1] - a[1]) || 1;
        pen.lineTo(...px([v[0] - sign * v[2] * (b[1] - a[1]) / length,
          v[1] + sign * v[2] * (b[0] - a[0]) / length]));
      });
      pen.stroke();
    }
    pen.font = "20px system-ui, sans-serif";
    pen.fillStyle = "#000";
    pen.fillRect(0, 0, pen.measureText("along " + view).width + 14, 32);
    pen.fillStyle = "#fff";
    pen.fillText("along " + view, 8, 23);
  });
}

function drawnImage(image, turned) {
  const [rows, columns] = image.shape, grey = numbers(image.data, Uint8Array);
  const canvas = document.createElement("canvas");
  canvas.width = turned ? rows : columns;
  canvas.height = turned ? columns : rows;
  const pen = canvas.getContext("2d", { willReadFrequently: true }), pixels = pen.createImageData(canvas.width, canvas.height);
  for (let r = 0; r < rows; r++) {
    for (let c = 0; c < columns; c++) {
      const at = 4 * (turned ? c * canvas.width + r : r * canvas.width + c);
      pixels.data[at] = pixels.data[at + 1] = pixels.data[at + 2] = grey[r * columns + c];
      pixels.data[at + 3] = 255;
    }
  }
  pen.putImageData(pixels, 0, 0);
  return canvas;
}

function describe(graph, id) {
  const panel = byId("picked"), vessel = graph.place.get(id);
  panel.textContent = "";
  made("h3", "Segment " + id, panel);
  if (vessel === undefined) {
    made("p", "is not shown here; segments.csv holds its figures.", panel).className = "quiet";
    return undefined;
  }
  const list = made("dl", "", panel);
  graph.data.shown.forEach((figure) => {
    made("dt", figure.label, list);
    made("dd", (readable(figure.values[vessel]) + " " + figure.unit).trim(), list);
  });
  const review = graph.data.review[id];
  if (review) made("p", "To look at: " + review + ".", panel).className = "quiet";
  if (Object.keys(graph.data.images).length) {
    const place = made("div", "", panel);
    place.id = "cuts";
    cuts(graph, vessel, place);
  }
  return vessel;
}

async function drawSpace() {
  const plot = byId("scene"), chooser = byId("quantity");
  const graph = decoded(JSON.parse(await unpacked("packed-scene")));
  byId("note").textContent = graph.data.note;
  const known = graph.data.colours.filter((c) => c.values);
  graph.data.colours.forEach((colour) => {
    const option = made("option", colour.label + (colour.values ? "" : ": not known here"), chooser);
    option.value = colour.name;
    option.disabled = !colour.values;
  });
  byId("segment").addEventListener("change", (event) => show(Number(event.target.value)));
  document.querySelectorAll("[data-segment]").forEach((button) => {
    button.addEventListener("click", () => {
      show(Number(button.dataset.segment));
      byId("space").scrollIntoView();
    });
  });
  let marked = null;
  function show(id) {
    const vessel = describe(graph, id);
    byId("segment").value = id;
    plot.dataset.segment = id;
    if (marked) marked(vessel);
  }
  if (!known.length || !graph.segment.length) {
    plot.textContent = "";
    made("p", "There is no segment with a radius to show.", plot).className = "quiet";
    return;
  }
  const script = document.createElement("script");
  script.textContent = await unpacked("packed-plotly");
  document.head.appendChild(script);
  const points = graph.radius.length, sides = points < 4000 ? 10 : points < 12000 ? 6 : 4;
  const mesh = tubes(graph, graph.segment.keys(), sides, 1);
  const look = { type: "mesh3d", hoverinfo: "none", flatshading: false,
    lighting: { ambient: 0.75, diffuse: 0.5, specular: 0.1, roughness: 0.8 } };
  const trace = { ...look, x: mesh.x, y: mesh.y, z: mesh.z, i: mesh.i, j: mesh.j, k: mesh.k,
    ...painted(mesh, known[0]) };
  const mark = { ...look, x: [], y: [], z: [], i: [], j: [], k: [], color: ORANGE };
  const axis = (name) => ({ title: { text: name + " in " + graph.data.unit[0], font: { size: 12 } },
    showbackground: false, gridcolor: "#e4e8ea", zerolinecolor: "#e4e8ea", showspikes: false });
  const layout = {
    margin: { l: 0, r: 0, t: 0, b: 0 }, showlegend: false, uirevision: "kept",
    font: { family: "system-ui, sans-serif", color: "#1d2326" },
    // As the image along z is seen: x to the right, y down.
    scene: { aspectmode: "data", dragmode: "orbit", xaxis: axis("x"), yaxis: axis("y"),
      zaxis: axis("z"), camera: { up: { x: 0, y: -1, z: 0 }, eye: { x: 0.5, y: -0.6, z: -1.95 } } },
  };
  plot.textContent = "";
  await Plotly.newPlot(plot, [trace, mark], layout, { displaylogo: false, responsive: true,
    modeBarButtons: [["toImage", "orbitRotation", "pan3d", "zoom3d", "resetCameraDefault3d"]] });
  chooser.addEventListener("change", () => {
    const paint = painted(mesh, known.find((c) => c.name === chooser.value));
    Plotly.restyle(plot, { intensity: [paint.intensity], cmin: paint.cmin, cmax: paint.cmax,
      colorscale: [paint.colorscale], colorbar: [paint.colorbar] }, [0]);
    plot.dataset.colour = chooser.value;
  });
  marked = (vessel) => {
    const shape = tubes(graph, vessel === undefined ? [] : [vessel], sides, 1.08);
    Plotly.restyle(plot, { x: [shape.x], y: [shape.y], z: [shape.z], i: [shape.i], j: [shape.j],
      k: [shape.k] }, [1]);
  };
  plot.on("plotly_click", (event) => {
    const point = event.points[0];
    if (point.curveNumber !== 0) return;
    const id = graph.segment[mesh.owner[point.pointNumber]];
    // Drawing the mark while the button is down would report the same click again.
    if (String(id) !== plot.dataset.segment) setTimeout(() => show(id));
  });
  plot.dataset.colour = known[0].name;
  plot.dataset.ready = "1";
}

document.querySelectorAll(".switch").forEach((button) => {
  button.addEventListener("click", () => {
    document.querySelectorAll(".switch").forEach((other) => {
      other.setAttribute("aria-pressed", String(other === button));
      byId("view-" + other.dataset.show).classList.toggle("hidden", other !== button);
    });
  });
});

window.addEventListener("beforeprint", () => {
  document.querySelectorAll("details").forEach((details) => { details.open = true; });
});

drawSpace().catch((error) => {
  const plot = byId("scene");
  plot.textContent = "";
  made("p", "This browser cannot draw the graph in space (" + error.message +
    "). The tables and pictures hold the same figures.", plot).className = "quiet";
  plot.dataset.failed = error.message;
});
})();
