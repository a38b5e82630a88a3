// The time slider: arm, cursors and readings in step.

// Text that changes only where it is another, so that what stays is not laid out again.
function put(element, text) {
  if (element.firstChild) {
    if (element.firstChild.data !== text) element.firstChild.data = text;
  } else {
    element.textContent = text;
  }
}

class Scrub {
  constructor(view) {
    const find = (id) => document.getElementById(id);
    this.view = view;
    this.slider = find("slider");
    this.now = find("now");
    this.play = find("play");
    this.rate = find("rate");
    this.readings = find("readings");
    this.rows = null;
    this.index = 0;
    this.time = 0;
    this.waiting = false;
    this.playing = false;
    this.resized = new ResizeObserver(([entry]) => {
      this.width = entry.contentRect.width;
      if (this.rows) this.go(this.index, this.time);
    });
    this.slider.addEventListener("input", () => {
      this.stop();
      this.go(Number(this.slider.value));
    });
    this.play.addEventListener("click", () => (this.playing ? this.stop() : this.start()));
    this.slider.addEventListener("keydown", (event) => {
      if (event.key !== " ") return;
      event.preventDefault();
      this.play.click();
    });
    document.addEventListener("click", (event) => {
      const link = event.target.closest("a[data-time]");
      if (link && this.rows) this.seek(Number(link.dataset.time));
      const plot = event.target.closest("#plots svg");
      if (plot && this.rows) this.seek(this.timeAt(plot, event.clientX));
    });
    for (const button of document.querySelectorAll("button[data-look]")) {
      button.addEventListener("click", () => this.view.look(button.dataset.look));
    }
    for (const button of document.querySelectorAll("button[data-turn]")) {
      const [azimuth, elevation, zoom] = button.dataset.turn.split(" ").map(Number);
      button.addEventListener("click", () => {
        this.view.turn(azimuth, elevation);
        this.view.zoom(zoom);
      });
    }
  }

  // New rows: the time that was looked at stays.
  load(rows) {
    this.rows = rows;
    this.slider.max = rows.count - 1;
    this.cursors = [...document.querySelectorAll("#plots .cursor")];
    this.width = this.cursors.length ? this.cursors[0].parentElement.clientWidth : 0;
    this.resized.disconnect();
    if (this.cursors.length) this.resized.observe(this.cursors[0].parentElement);
    this.build();
    this.go(rows.nearest(Math.min(this.time, rows.time[rows.count - 1])), this.time);
  }

  timeAt(plot, x) {
    const { start, end, left, right } = this.rows.doc.axis;
    const box = plot.getBoundingClientRect();
    const at = ((x - box.left) / box.width) * plot.viewBox.baseVal.width;
    const part = Math.max(0, Math.min(1, (at - left) / (right - left)));
    return start + part * (end - start);
  }

  seek(time) {
    this.stop();
    this.go(this.rows.nearest(time));
  }

  go(index, time) {
    this.index = Math.max(0, Math.min(this.rows.count - 1, index));
    this.time = time ?? this.rows.time[this.index];
    this.slider.value = this.index;
    if (this.waiting) return;
    this.waiting = true;
    requestAnimationFrame(() => {
      this.waiting = false;
      this.show();
    });
  }

  start() {
    if (this.index >= this.rows.count - 1) this.go(0);
    this.playing = true;
    this.play.textContent = "Pause";
    let last = performance.now();
    let time = this.rows.time[this.index];
    const frame = (now) => {
      if (!this.playing) return;
      time += ((now - last) / 1000) * Number(this.rate.value);
      last = now;
      this.go(this.rows.nearest(time));
      if (time >= this.rows.time[this.rows.count - 1]) this.stop();
      else requestAnimationFrame(frame);
    };
    requestAnimationFrame(frame);
  }

  stop() {
    this.playing = false;
    this.play.textContent = "Play";
  }

  // The table of readings: a line a joint, a cell a quantity with its value, share and bar.
  build() {
    const { doc } = this.rows;
    this.cells = [];
    const element = (name, text) => {
      const made = document.createElement(name);
      if (text !== undefined) made.textContent = text;
      return made;
    };
    const head = element("tr");
    for (const text of ["joint", ...doc.quantities]) {
      const cell = element("th", text);
      cell.scope = "col";
      head.append(cell);
    }
    const lines = doc.joints.map((joint, j) => {
      const line = element("tr");
      const name = element("th", joint.name);
      name.scope = "row";
      line.append(name);
      for (const quantity of doc.quantities) {
        const cell = element("td");
        const value = element("span");
        value.className = "value";
        const foot = element("span");
        foot.className = "foot";
        const share = element("span");
        share.className = "share";
        foot.append(share, element("small", (joint.units[quantity] ?? "").replace("^2", "²").replace("^3", "³")));
        cell.append(value, foot);
        line.append(cell);
        this.cells.push({ cell, value, share, foot, quantity, joint: j });
      }
      return line;
    });
    this.readings.tHead.replaceChildren(head);
    this.readings.tBodies[0].replaceChildren(...lines);
    this.lines = lines;
  }

  show() {
    const { rows, index } = this;
    const { doc } = rows;
    const time = rows.time[index];
    const { start, end, left, right, width } = doc.axis;
    const x = ((left + ((time - start) / (end - start)) * (right - left)) / width) * this.width;
    for (const cursor of this.cursors) cursor.style.transform = `translateX(${x.toFixed(2)}px)`;
    const paced = rows.pacing(index);
    for (const { cell, value, share, foot, quantity, joint } of this.cells) {
      const part = rows.share(quantity, joint, index);
      put(value, rows.text(`${quantity} ${joint}`, index));
      put(share, Number.isNaN(part) ? "" : `${(100 * part).toFixed(1)} %`);
      foot.style.setProperty("--share", Number.isNaN(part) ? 0 : Math.max(0, Math.min(1, part)).toFixed(3));
      cell.classList.toggle("over", part > 1.000001);
      cell.classList.toggle("paces", !!paced && paced.joint === joint && paced.quantity === quantity);
    }
    const q = doc.joints.slice(0, doc.scene.parents.length).map((joint, j) => rows.value(`position ${j}`, index) / joint.one);
    const step = rows.step[index];
    this.view.show(q, doc.scene.step_tool[step] ?? 0, paced);
    this.tell(time, step, paced);
  }

  tell(time, step, paced) {
    const { rows, index } = this;
    const { doc } = rows;
    const clock = `${time.toFixed(doc.time_decimals)} s`;
    const place = ["x", "y", "z"].map((axis) => rows.text(`tool ${axis}`, index));
    const parts = [
      ["time", clock],
      ["row", `${rows.row[index] + 1} of ${doc.rows}`],
      ["step", doc.steps[step] ?? String(step + 1)],
      ["paced by", paced ? paced.text : "nothing"],
      ["tool at", `${place.join(", ")} mm`],
    ];
    if (rows.columns.has("tool speed")) parts.push(["tool speed", `${rows.text("tool speed", index)} mm/s`]);
    if (rows.columns.has("tool turning speed")) {
      parts.push(["tool turns", `${rows.text("tool turning speed", index)} deg/s`]);
    }
    if (rows.columns.has("deviation") && !Number.isNaN(rows.value("deviation", index))) {
      parts.push(["off the path", `${rows.text("deviation", index)} µm, ${rows.text("turn", index)} µrad`]);
    }
    parts.forEach(([name, value], k) => {
      const line = this.now.children[k] ?? this.now.appendChild(document.createElement("div"));
      if (!line.firstChild) line.append(document.createElement("dt"), document.createElement("dd"));
      put(line.children[0], name);
      put(line.children[1], value);
    });
    while (this.now.children.length > parts.length) this.now.lastChild.remove();
    this.slider.setAttribute("aria-valuetext", `${clock}, row ${rows.row[index] + 1}, step ${parts[2][1]}, paced by ${parts[3][1]}`);
    this.view.canvas.setAttribute("aria-label", `The arm at ${clock}, tool at ${parts[4][1]}. Arrow keys turn the view, plus and minus zoom, 0 shows the whole.`);
  }
}
