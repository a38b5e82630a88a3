// The rows of the table as the page carries them: unpacked once, then read by row.

const QUANTITIES = ["position", "velocity", "acceleration", "jerk", "torque"];
const NOT_A_NUMBER = -2147483648;

async function unpack(packed) {
  const bytes = Uint8Array.from(atob(packed.data), (char) => char.charCodeAt(0));
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("deflate"));
  const raw = new Uint8Array(await new Response(stream).arrayBuffer());
  const rows = packed.rows;
  return packed.columns.map(([decimals, order], k) => {
    const at = 4 * rows * k;
    const whole = new Int32Array(rows);
    for (let i = 0; i < rows; i++) {
      const zigzag = raw[at + i] | (raw[at + rows + i] << 8) | (raw[at + 2 * rows + i] << 16) | (raw[at + 3 * rows + i] << 24);
      whole[i] = (zigzag >>> 1) ^ -(zigzag & 1);
    }
    for (let pass = 0; pass < order; pass++) {
      for (let i = 1; i < rows; i++) whole[i] = (whole[i] + whole[i - 1]) | 0;
    }
    const power = 10 ** decimals;
    const values = Float64Array.from(whole, (value) => (value === NOT_A_NUMBER ? NaN : value / power));
    return { values, decimals };
  });
}

class Rows {
  constructor(doc, columns) {
    this.doc = doc;
    this.count = doc.packed.rows;
    this.columns = new Map(doc.columns.map((key, k) => [key, columns[k]]));
    this.time = this.columns.get("time").values;
    this.step = this.columns.get("step").values;
    this.pace = this.columns.get("pace").values;
    this.row = this.columns.get("row").values;
  }

  static async of(doc) {
    return new Rows(doc, await unpack(doc.packed));
  }

  value(key, index) {
    const column = this.columns.get(key);
    return column ? column.values[index] : NaN;
  }

  // As the table is shown: rounded to the decimals that the page carries.
  text(key, index) {
    const column = this.columns.get(key);
    if (!column || Number.isNaN(column.values[index])) return "–";
    return column.values[index].toFixed(column.decimals);
  }

  // The index of the row nearest to a time.
  nearest(time) {
    let low = 0;
    let high = this.count - 1;
    while (high - low > 1) {
      const middle = (low + high) >> 1;
      if (this.time[middle] <= time) low = middle;
      else high = middle;
    }
    return time - this.time[low] <= this.time[high] - time ? low : high;
  }

  // Part of its limit that a joint uses, as the audit counts it: 1 at the limit, of a position from the middle of its range.
  share(quantity, joint, index) {
    const limits = this.doc.joints[joint].limits[quantity];
    const value = this.value(`${quantity} ${joint}`, index);
    if (!limits || Number.isNaN(value)) return NaN;
    const [low, high] = limits.map((limit, side) => (limit === null ? (side ? Infinity : -Infinity) : limit));
    if (quantity === "position") {
      const margin = Math.min(high - value, value - low);
      if (!Number.isFinite(margin)) return NaN;
      const half = Number.isFinite(high - low) && high > low ? (high - low) / 2 : this.doc.joints[joint].one;
      return 1 - margin / half;
    }
    const left = quantity === "torque" && this.columns.has(`torque left ${joint}`) ? this.value(`torque left ${joint}`, index) : 1;
    const limit = (value >= 0 ? high : low) * left;
    return Number.isFinite(limit) ? value / limit : NaN;
  }

  pacing(index) {
    const label = this.pace[index];
    if (label < 0) return null;
    const [joint, quantity] = this.doc.labels[label];
    return { joint, quantity, text: joint < 0 ? quantity : `${this.doc.joints[joint].name} ${quantity}` };
  }
}
