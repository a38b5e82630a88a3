// The arm, its path and frames on a canvas, turned by mouse, touch, buttons or keys.

const RING = Array.from({ length: 18 }, (_, k) => [Math.cos((k * Math.PI) / 9), Math.sin((k * Math.PI) / 9)]);
const VIEWS = { front: [0, 4], side: [-90, 4], above: [-90, 89.5] };

class View {
  constructor(canvas, labels) {
    this.canvas = canvas;
    this.labels = labels;
    this.scene = null;
    this.state = { azimuth: -58, elevation: 24, zoom: 1, x: 0, y: 0 };
    this.pose = null;
    this.listen();
    this.inks = new Map();
    new ResizeObserver(() => this.draw()).observe(canvas);
    for (const query of ["(prefers-color-scheme: dark)", "print"]) {
      matchMedia(query).addEventListener("change", () => {
        this.inks.clear();
        this.draw();
      });
    }
    labels.addEventListener("change", () => this.draw());
  }

  load(scene) {
    this.scene = scene;
    this.pose = null;
  }

  show(q, tool, paced) {
    this.pose = { ...standing(this.scene, q, tool), paced };
    this.draw();
  }

  turn(azimuth, elevation) {
    this.state.azimuth = ((this.state.azimuth + azimuth + 540) % 360) - 180;
    this.state.elevation = Math.max(-89.5, Math.min(89.5, this.state.elevation + elevation));
    this.draw();
  }

  zoom(factor) {
    this.state.zoom = Math.max(0.3, Math.min(20, this.state.zoom * factor));
    this.draw();
  }

  look(name) {
    const [azimuth, elevation] = VIEWS[name] || [-58, 24];
    Object.assign(this.state, { azimuth, elevation });
    if (!VIEWS[name]) Object.assign(this.state, { zoom: 1, x: 0, y: 0 });
    this.draw();
  }

  listen() {
    const canvas = this.canvas;
    const held = new Map();
    canvas.addEventListener("pointerdown", (event) => {
      held.set(event.pointerId, [event.clientX, event.clientY]);
      canvas.setPointerCapture(event.pointerId);
    });
    canvas.addEventListener("pointermove", (event) => {
      const last = held.get(event.pointerId);
      if (!last) return;
      const [dx, dy] = [event.clientX - last[0], event.clientY - last[1]];
      if (held.size === 2) {
        const other = [...held].find(([id]) => id !== event.pointerId)[1];
        const apart = (p) => Math.hypot(p[0] - other[0], p[1] - other[1]) || 1;
        this.zoom(apart([event.clientX, event.clientY]) / apart(last));
      } else if (event.shiftKey || event.buttons > 1) {
        this.state.x += dx / canvas.clientHeight;
        this.state.y += dy / canvas.clientHeight;
        this.draw();
      } else {
        this.turn(-0.5 * dx, 0.5 * dy);
      }
      held.set(event.pointerId, [event.clientX, event.clientY]);
    });
    for (const end of ["pointerup", "pointercancel"]) canvas.addEventListener(end, (event) => held.delete(event.pointerId));
    canvas.addEventListener("contextmenu", (event) => event.preventDefault());
    canvas.addEventListener(
      "wheel",
      (event) => {
        if (document.activeElement !== canvas && !event.ctrlKey) return; // the page scrolls on until the view is chosen
        event.preventDefault();
        this.zoom(Math.exp(-0.0015 * event.deltaY));
      },
      { passive: false },
    );
    canvas.addEventListener("keydown", (event) => {
      const keys = {
        ArrowLeft: () => this.turn(-5, 0),
        ArrowRight: () => this.turn(5, 0),
        ArrowUp: () => this.turn(0, 5),
        ArrowDown: () => this.turn(0, -5),
        "+": () => this.zoom(1.15),
        "=": () => this.zoom(1.15),
        "-": () => this.zoom(1 / 1.15),
        0: () => this.look("whole"),
      };
      if (!keys[event.key] || event.ctrlKey || event.metaKey || event.altKey) return;
      event.preventDefault();
      keys[event.key]();
    });
  }

  // What turns points of the base frame into [x, y, nearness] on the canvas.
  projection(width, height) {
    const { azimuth, elevation, zoom, x: right, y: down } = this.state;
    const [a, e] = [(azimuth * Math.PI) / 180, (elevation * Math.PI) / 180];
    const [ca, sa, ce, se] = [Math.cos(a), Math.sin(a), Math.cos(e), Math.sin(e)];
    const { centre, radius } = this.scene;
    const scale = 0.55 * Math.min(width, height) * Math.sqrt(24) * zoom;
    return (p) => {
      const [x, y, z] = [(p[0] - centre[0]) / radius, (p[1] - centre[1]) / radius, (p[2] - centre[2]) / radius];
      const near = (ca * x + sa * y) * ce + se * z;
      const grown = scale / (5 - near);
      const up = ce * z - se * (ca * x + sa * y);
      return [width / 2 + height * right + grown * (ca * y - sa * x), height / 2 + height * down - grown * up, near];
    };
  }

  draw() {
    const canvas = this.canvas;
    if (!this.scene || !this.pose || !canvas.clientWidth) return;
    const dense = window.devicePixelRatio || 1;
    const [width, height] = [canvas.clientWidth, canvas.clientHeight];
    if (canvas.width !== Math.round(width * dense) || canvas.height !== Math.round(height * dense)) {
      canvas.width = Math.round(width * dense);
      canvas.height = Math.round(height * dense);
    }
    const pen = canvas.getContext("2d");
    pen.setTransform(dense, 0, 0, dense, 0, 0);
    pen.clearRect(0, 0, width, height);
    pen.lineCap = pen.lineJoin = "round";
    const ink = (name) => this.ink(name);
    const place = this.projection(width, height);
    const [below, above] = this.layers(width, height, dense, place, ink);
    pen.drawImage(below, 0, 0, width, height);
    const fallen = ([x, y]) => [x, y, 0];
    this.lines(pen, place, this.pose.links.map(([a, b]) => [fallen(a), fallen(b)]), ink("shadow"), 7);
    this.body(pen, place, ink, Math.min(width, height));
    pen.drawImage(above, 0, 0, width, height);
    if (this.labels.checked) {
      for (const { name, joint, pose } of this.scene.frames) {
        if (joint >= 0) this.triad(pen, place, times(this.pose.frames[joint], pose), 0.09, ink("muted"), name);
      }
    }
    this.triad(pen, place, this.pose.tool, 0.12, ink("ink"), "");
  }

  // What does not move with the arm, drawn once for each view: what lies below it, and what shows through from above.
  layers(width, height, dense, place, ink) {
    const { azimuth, elevation, zoom, x, y } = this.state;
    const key = [width, height, dense, azimuth, elevation, zoom, x, y, this.labels.checked].join();
    if (this.drawn && this.drawn.key === key && this.drawn.scene === this.scene && this.inks.size) return this.drawn.layers;
    const layers = [0, 1].map(() => {
      const layer = document.createElement("canvas");
      layer.width = Math.round(width * dense);
      layer.height = Math.round(height * dense);
      const pen = layer.getContext("2d");
      pen.setTransform(dense, 0, 0, dense, 0, 0);
      pen.lineCap = pen.lineJoin = "round";
      return layer;
    });
    const [below, above] = layers.map((layer) => layer.getContext("2d"));
    this.floor(below, place, ink);
    this.lines(below, place, this.scene.programmed, ink("muted"), 1, [4, 4]);
    this.lines(below, place, [this.scene.path], ink("way"), 2);
    this.lines(below, place, this.scene.blends, ink("blend"), 4);
    above.globalAlpha = 0.35; // what lies behind the arm shows through
    this.lines(above, place, [this.scene.path], ink("way"), 2);
    above.globalAlpha = 1;
    if (this.labels.checked) this.words(above, place, ink);
    this.drawn = { key, scene: this.scene, layers };
    return layers;
  }

  // A colour of the page by its name, looked up once for each theme.
  ink(name) {
    if (!this.inks.has(name)) this.inks.set(name, getComputedStyle(this.canvas).getPropertyValue(`--${name}`).trim());
    return this.inks.get(name);
  }

  lines(pen, place, polylines, colour, width, dash = []) {
    pen.strokeStyle = colour;
    pen.lineWidth = width;
    pen.setLineDash(dash);
    pen.beginPath();
    for (const points of polylines) {
      points.forEach((point, i) => {
        const [x, y] = place(point);
        if (i) pen.lineTo(x, y);
        else pen.moveTo(x, y);
      });
    }
    pen.stroke();
    pen.setLineDash([]);
  }

  floor(pen, place, ink) {
    const { centre, radius, floor: step } = this.scene;
    const reach = 1.05 * radius;
    const [x0, y0] = [0, 1].map((k) => Math.floor((centre[k] - reach) / step) * step);
    const count = Math.ceil((2 * reach) / step) + 1;
    const lines = [];
    for (let k = 0; k <= count; k++) {
      lines.push([[x0 + k * step, y0, 0], [x0 + k * step, y0 + count * step, 0]]);
      lines.push([[x0, y0 + k * step, 0], [x0 + count * step, y0 + k * step, 0]]);
    }
    this.lines(pen, place, lines, ink("floor"), 1);
  }

  // Links, rails and joints, the far ones first.
  body(pen, place, ink, size) {
    const { scene, pose } = this;
    const n = pose.frames.length;
    const widest = 0.042 * size * this.state.zoom;
    const drawn = pose.links.map(([a, b, width]) => {
      const [p, q] = [place(a), place(b)];
      const stroke = () => {
        if (Math.hypot(p[0] - q[0], p[1] - q[1]) < 0.5) return;
        for (const [colour, more] of [["edge", 2.5], ["link", 0]]) {
          pen.strokeStyle = ink(colour);
          pen.lineWidth = width * widest + more;
          pen.beginPath();
          pen.moveTo(p[0], p[1]);
          pen.lineTo(q[0], q[1]);
          pen.stroke();
        }
      };
      return [(p[2] + q[2]) / 2, stroke];
    });
    for (let i = 0; i < n; i++) {
      const half = 0.055 * (1 - (0.65 * i) / (n + 1)) * scene.radius;
      const fill = pose.paced && pose.paced.joint === i ? ink(pose.paced.quantity.replace(" ", "-")) : ink("joint");
      const [near, stroke] = this.joint(pen, place, i, half, fill, ink("edge"));
      drawn.push([near + 0.02, stroke]);
      if (!scene.revolute[i]) drawn.push([near - 0.3, () => this.rail(pen, place, i, ink)]);
    }
    drawn.sort((a, b) => a[0] - b[0]).forEach(([, stroke]) => stroke());
  }

  // A turning joint as a drum about its axis, a sliding one as a block along it.
  joint(pen, place, i, half, fill, edge) {
    const frame = this.pose.frames[i];
    const axis = turned(frame, this.scene.axes[i]);
    const least = axis.map(Math.abs);
    const other = [0, 0, 0];
    other[least.indexOf(Math.min(...least))] = 1;
    const u = unit(cross(axis, other));
    const v = cross(axis, u);
    const centre = origin(frame);
    const ring = this.scene.revolute[i] ? RING : [[1, 1], [-1, 1], [-1, -1], [1, -1]];
    const round = this.scene.revolute[i] ? 0.62 * half : 0.5 * half;
    const cap = (side) => ring.map(([c, s]) => place(centre.map((x, k) => x + side * half * axis[k] + round * (c * u[k] + s * v[k]))));
    const caps = [cap(1), cap(-1)];
    const nearer = caps[0][0][2] + caps[0][ring.length / 2][2] >= caps[1][0][2] + caps[1][ring.length / 2][2] ? 0 : 1;
    const stroke = () => {
      for (const outline of [hull([...caps[0], ...caps[1]]), caps[nearer]]) {
        pen.fillStyle = fill;
        pen.strokeStyle = edge;
        pen.lineWidth = 1.2;
        pen.beginPath();
        outline.forEach(([x, y], k) => (k ? pen.lineTo(x, y) : pen.moveTo(x, y)));
        pen.closePath();
        pen.fill();
        pen.stroke();
      }
    };
    return [place(centre)[2], stroke];
  }

  rail(pen, place, i, ink) {
    const range = this.scene.travel[i];
    if (!range) return;
    const ends = range.map((value) => moved(this.pose.before[i], this.scene.axes[i].map((x) => x * value)));
    this.lines(pen, place, [ends], ink("edge"), 5);
    this.lines(pen, place, [ends], ink("link"), 2.5);
  }

  triad(pen, place, frame, size, colour, name) {
    const start = place(origin(frame));
    pen.strokeStyle = pen.fillStyle = colour;
    pen.lineWidth = 1.6;
    pen.font = "italic 11px system-ui, sans-serif";
    ["x", "y", "z"].forEach((letter, k) => {
      const axis = [0, 0, 0];
      axis[k] = size * this.scene.radius;
      const end = place(moved(frame, axis));
      pen.beginPath();
      pen.moveTo(start[0], start[1]);
      pen.lineTo(end[0], end[1]);
      pen.stroke();
      pen.fillText(letter, start[0] + 1.2 * (end[0] - start[0]) - 3, start[1] + 1.2 * (end[1] - start[1]) + 3);
    });
    pen.font = "12px system-ui, sans-serif";
    if (name) pen.fillText(name, start[0] + 6, start[1] + 14);
  }

  // Frames that rest, and where the steps end: their numbers as far as they do not cover one another.
  words(pen, place, ink) {
    for (const { name, joint, pose } of this.scene.frames) {
      if (joint < 0) this.triad(pen, place, pose, 0.09, ink("muted"), name);
    }
    pen.fillStyle = ink("ink");
    pen.font = "bold 12px system-ui, sans-serif";
    const taken = [];
    for (const [step, point] of this.scene.ends) {
      const [x, y] = place(point);
      pen.beginPath();
      pen.arc(x, y, 2.8, 0, 2 * Math.PI);
      pen.fill();
      if (taken.some(([a, b]) => Math.abs(a - x) < 20 && Math.abs(b - y) < 11)) continue;
      taken.push([x, y]);
      pen.fillText(String(step + 1), x + 5, y - 5);
    }
  }
}

const cross = (a, b) => [a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]];

function unit(v) {
  const length = Math.hypot(...v);
  return v.map((x) => x / length);
}

// Convex outline of points on the canvas (Andrew 1979, monotone chain).
function hull(points) {
  const sorted = [...points].sort((a, b) => a[0] - b[0] || a[1] - b[1]);
  const left = (o, a, b) => (a[0] - o[0]) * (b[1] - o[1]) - (a[1] - o[1]) * (b[0] - o[0]) <= 0;
  const chain = (row) => {
    const found = [];
    for (const point of row) {
      while (found.length > 1 && left(found[found.length - 2], found[found.length - 1], point)) found.pop();
      found.push(point);
    }
    return found.slice(0, -1);
  };
  return [...chain(sorted), ...chain(sorted.reverse())];
}
