// Fills bokeh's plot from the packed map and answers frequency, quantity, port, pointer, tap and arrow keys.
(function () {
  "use strict";
  const root = document.getElementById("scan-map");
  const one = (selector) => root.querySelector(selector);
  const MISSING = -32768;
  const LEAST = -60; // dB; below, the reflection is lost in the rounding of the stored numbers
  const MOST = 1e5; // ohm
  const LOBE = "Grating lobe enters";
  const FINE = 4; // shades drawn per step of the grid

  function bytes(text) {
    return Uint8Array.from(atob(text), (letter) => letter.charCodeAt(0));
  }

  function whole(text) {
    return new Int16Array(bytes(text).buffer);
  }

  // The map's numbers: place (row * n + column, row by v) -> values; null where there are none.
  function open(data) {
    const n = data.axis.length;
    const bits = bytes(data.mask);
    const rank = new Int32Array(n * n).fill(-1);
    let count = 0;
    for (let i = 0; i < n * n; i++) if (bits[i >> 3] & (128 >> (i & 7))) rank[i] = count++;
    const gamma = whole(data.reflection.values);
    const gain = whole(data.gain.values);
    const ports = data.ports.length;
    return {
      n,
      axis: data.axis,
      reflection(f, port, place) {
        const at = (f * ports + port) * 2 * count + rank[place];
        if (rank[place] < 0 || gamma[at] === MISSING) return null;
        return [gamma[at] * data.reflection.step, gamma[at + count] * data.reflection.step];
      },
      gain(f, part, place) {
        const at = (f * 2 + part) * count + rank[place];
        return rank[place] < 0 || gain[at] === MISSING ? null : gain[at] * data.gain.step;
      },
      nearest(u, v) {
        const place = index(data.axis, v) * n + index(data.axis, u);
        return Math.hypot(u, v) > 1 || rank[place] < 0 ? null : place;
      },
      has: (place) => rank[place] >= 0,
      u: (place) => data.axis[place % n],
      v: (place) => data.axis[Math.floor(place / n)],
    };
  }

  function index(axis, x) {
    const n = axis.length;
    const i = Math.round(((x - axis[0]) / (axis[n - 1] - axis[0])) * (n - 1));
    return Math.max(0, Math.min(n - 1, i));
  }

  const decibel = ([re, im]) => 20 * Math.log10(Math.hypot(re, im));
  const signed = (x, digits) => x.toFixed(digits).replace("-", "−").replace(/^−(0(\.0*)?)$/, "$1");

  const theta = (u, v) => `${((Math.asin(Math.min(1, Math.hypot(u, v))) * 180) / Math.PI).toFixed(1)}°`;
  const phi = (u, v) => `${(((Math.atan2(v, u) * 180) / Math.PI + 360) % 360).toFixed(1).replace("360.0", "0.0")}°`;

  // R (1 + Gamma) / (1 - Gamma)
  function impedance([re, im], resistance) {
    const under = (1 - re) ** 2 + im ** 2;
    return [(resistance * (1 - re * re - im * im)) / under, (resistance * 2 * im) / under];
  }

  // As many digits as the rounding of the stored reflection leaves: |dZ| = 2 R |dGamma| / |1 - Gamma|^2.
  function ohms([re, im], resistance, step) {
    const [r, x] = impedance([re, im], resistance);
    if (!(Math.hypot(r, x) < MOST)) return ["open", "circuit"];
    const error = (2 * resistance * step) / ((1 - re) ** 2 + im ** 2);
    const power = Math.max(-1, Math.ceil(Math.log10(error)));
    return [r, x].map((part) => `${signed(Math.round(part / 10 ** power) * 10 ** power, Math.max(0, -power))} Ω`);
  }

  function words(map, data, state, place) {
    const blank = { theta: "", phi: "", resistance: "", reactance: "", reflection: "", co: "", cross: "" };
    if (place === null) return blank;
    const u = map.u(place), v = map.v(place);
    const gamma = map.reflection(state.frequency, state.port, place);
    const z = gamma ? ohms(gamma, data.ports[state.port].resistance, data.reflection.step) : ["", ""];
    const level = gamma ? decibel(gamma) : null;
    const gain = (part) => {
      const value = map.gain(state.frequency, part, place);
      if (value === null) return "";
      return value <= data.gain.floor ? `< ${signed(data.gain.floor, 0)} dBi` : `${signed(value, 2)} dBi`;
    };
    return {
      theta: theta(u, v),
      phi: phi(u, v),
      resistance: z[0],
      reactance: z[1],
      reflection: level === null ? "" : level < LEAST ? `< ${signed(LEAST, 0)} dB` : `${signed(level, 2)} dB`,
      co: gain(0),
      cross: gain(1),
    };
  }

  function show(map, data, state) {
    for (const [column, place] of [[1, state.pointer], [2, state.pin]]) {
      const text = words(map, data, state, place);
      for (const row of root.querySelectorAll(".readout tbody tr")) row.children[column].textContent = text[row.dataset.row];
    }
  }

  // The pinned column for those who listen.
  const spoken = (text) =>
    `Pinned: theta ${text.theta}, phi ${text.phi}, impedance ${text.resistance} and ${text.reactance}, ` +
    `active reflection ${text.reflection}, gain ${text.co}`;

  // Part of a circle inside visible space.
  function arc([x, y, radius]) {
    const line = { x: [], y: [] };
    for (let i = 0; i <= 720; i++) {
      const u = x + radius * Math.cos((i * Math.PI) / 360), v = y + radius * Math.sin((i * Math.PI) / 360);
      const inside = Math.hypot(u, v) <= 1 + 1e-9;
      line.x.push(inside ? u : NaN);
      line.y.push(inside ? v : NaN);
    }
    line.x.push(NaN);
    line.y.push(NaN);
    return line;
  }

  function join(lines) {
    return { x: lines.flatMap((line) => line.x), y: lines.flatMap((line) => line.y) };
  }

  // Bilinear between the points of the grid, from those that exist; nothing outside visible space.
  function shades(NdArray, map, values) {
    const n = map.n, m = (n - 1) * FINE + 1, fine = new Float32Array(m * m).fill(NaN);
    const step = (map.axis[n - 1] - map.axis[0]) / (m - 1);
    for (let row = 0; row < m; row++) {
      for (let column = 0; column < m; column++) {
        if (Math.hypot(map.axis[0] + row * step, map.axis[0] + column * step) > 1) continue;
        const i = Math.min(n - 2, Math.floor(row / FINE)), j = Math.min(n - 2, Math.floor(column / FINE));
        const a = row / FINE - i, b = column / FINE - j;
        let sum = 0, weight = 0;
        const add = (x, w) => { if (x === x && w > 0) { sum += w * x; weight += w; } };
        add(values[i * n + j], (1 - a) * (1 - b));
        add(values[i * n + j + 1], (1 - a) * b);
        add(values[(i + 1) * n + j], a * (1 - b));
        add(values[(i + 1) * n + j + 1], a * b);
        if (weight > 0) fine[row * m + column] = sum / weight;
      }
    }
    return { image: [new NdArray(fine, [m, m])], corner: [map.axis[0] - step / 2], side: [m * step] };
  }

  const gaps = (values) => values.map((value) => (value === null ? NaN : value));

  function drawing(plot, map, data) {
    const source = (name) => plot.select(name).find((model) => "data" in model);
    const image = source("image"), mapper = plot.select_one("mapper"), bar = plot.select_one("bar");
    const looks = {
      reflection: ["active reflection (dB)", -30, 0],
      co: ["realised gain, co-polar (dBi)", data.gain.top[0] - 20, data.gain.top[0]],
      cross: ["realised gain, cross-polar (dBi)", Math.max(data.gain.top[1], -60) - 40, Math.max(data.gain.top[1], -60)],
    };
    source("rim").data = arc([0, 0, 1]);
    source("cone").data = arc([0, 0, data.cone]);

    function value(state, place) {
      if (state.quantity !== "reflection") return map.gain(state.frequency, state.quantity === "co" ? 0 : 1, place);
      const gamma = map.reflection(state.frequency, state.port, place);
      return gamma && decibel(gamma);
    }

    function dot(name, place) {
      source(name).data = place === null ? { x: [], y: [] } : { x: [map.u(place)], y: [map.v(place)] };
    }

    return {
      all(state) {
        const values = Float32Array.from({ length: map.n * map.n }, (_, place) => value(state, place) ?? NaN);
        image.data = shades(image.data.image[0].constructor, map, values);
        [bar.title, mapper.low, mapper.high] = looks[state.quantity];
        const circles = data.circles[state.frequency];
        source("lobes").data = join(circles.filter((circle) => circle[3] === LOBE).map(arc));
        source("waves").data = join(circles.filter((circle) => circle[3] !== LOBE).map(arc));
        const [x, y] = state.quantity === "reflection" ? data.contours[state.frequency][state.port] : [[], []];
        source("contour").data = { x: gaps(x), y: gaps(y) };
        const peaks = data.peaks[state.frequency].filter((peak) => peak[2] === state.port);
        source("peaks").data = { x: peaks.map((peak) => peak[0]), y: peaks.map((peak) => peak[1]) };
        this.marks(state);
      },
      marks(state) {
        dot("pin", state.pin);
        dot("pointer", state.pointer);
      },
    };
  }

  function worst(map, data, state) {
    let found = state.pin, most = -1;
    for (let place = 0; place < map.n * map.n; place++) {
      if (!map.has(place) || Math.hypot(map.u(place), map.v(place)) > data.cone + 1e-9) continue;
      const gamma = map.reflection(state.frequency, state.port, place);
      if (gamma && Math.hypot(...gamma) > most) [found, most] = [place, Math.hypot(...gamma)];
    }
    return found;
  }

  // Which Floquet waves the circles belong to, and how high the marked peaks are.
  function legend(circles, peaks) {
    const groups = new Map();
    for (const [, , , name, order] of circles) groups.set(name, [...(groups.get(name) || []), order.replaceAll("-", "−")]);
    const lines = [...groups].map(([name, orders]) => `${name}: ${orders.join(" ")}`);
    const told = peaks.map(([u, v, , level]) => `${signed(level, 2)} dB at θ ${theta(u, v)}, φ ${phi(u, v)}`);
    return told.length ? [...lines, `Peaks: ${told.join("; ")}`] : lines;
  }

  // Square frame as wide as the column lets it be.
  function fit(plot, box) {
    const side = Math.floor(Math.min(520, box.clientWidth - 68));
    if (side > 100 && side !== plot.frame_width) plot.setv({ frame_width: side, frame_height: side });
  }

  function wire(plot, data) {
    const map = open(data), draw = drawing(plot, map, data), box = one(".plot");
    const slider = one(".frequency"), port = one(".port");
    const state = { quantity: "reflection", port: 0, frequency: data.frequency.length >> 1, pin: map.nearest(0, 0), pointer: null };

    function update() {
      const hertz = `${(data.frequency[state.frequency] / 1e9).toFixed(4).replace(/\.?0+$/, "")} GHz`;
      one(".hertz").textContent = hertz;
      if (slider) slider.setAttribute("aria-valuetext", hertz);
      const peaks = data.peaks[state.frequency].filter((peak) => peak[2] === state.port);
      const lines = legend(data.circles[state.frequency], peaks).map((line) => {
        const item = document.createElement("li");
        item.textContent = line;
        return item;
      });
      one(".circles").replaceChildren(...lines);
      draw.all(state);
      show(map, data, state);
    }

    function mark(changes) {
      Object.assign(state, changes);
      draw.marks(state);
      show(map, data, state);
      if (changes.pin !== undefined) one(".spoken").textContent = spoken(words(map, data, state, state.pin));
    }

    one(".quantity").addEventListener("change", (event) => { state.quantity = event.target.value; update(); });
    if (port) port.addEventListener("change", () => { state.port = Number(port.value); update(); });
    if (slider) slider.addEventListener("input", () => { state.frequency = Number(slider.value); update(); });
    one(".worst").addEventListener("click", () => mark({ pin: worst(map, data, state) }));
    plot.on_event("mousemove", (event) => mark({ pointer: map.nearest(event.x, event.y) }));
    plot.on_event("mouseleave", () => mark({ pointer: null }));
    plot.on_event("tap", (event) => {
      const place = map.nearest(event.x, event.y);
      if (place !== null) mark({ pin: place });
    });
    box.addEventListener("keydown", (event) => {
      const step = { ArrowLeft: -1, ArrowRight: 1, ArrowUp: map.n, ArrowDown: -map.n }[event.key];
      if (step === undefined || state.pin === null) return;
      event.preventDefault();
      if (map.has(state.pin + step)) mark({ pin: state.pin + step });
    });
    // the browser keeps a form's old state over a reload
    one(".quantity").value = state.quantity;
    if (port) port.value = String(state.port);
    if (slider) slider.value = String(state.frequency);
    new ResizeObserver(() => fit(plot, box)).observe(box);
    update();
  }

  async function start() {
    const data = JSON.parse(one(".map-data").textContent);
    one(".ui").hidden = false;
    const views = await Bokeh.embed.embed_item(JSON.parse(one(".map-plot").textContent), one(".plot"));
    wire(views.roots[0].model, data);
    root.dataset.ready = "yes";
  }

  start().catch((fault) => {
    console.error(fault);
    one(".ui").hidden = true;
    one(".trouble").hidden = false;
    one(".trouble").textContent = `The map could not be drawn in this browser (${fault.message}).`;
  });
})();
