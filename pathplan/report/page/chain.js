// Where the joints are: the arm's fixed transforms and axes, 4 x 4 matrices as 16 numbers by rows.

function times(a, b) {
  const c = new Float64Array(16);
  for (let i = 0; i < 16; i += 4) {
    for (let j = 0; j < 4; j++) c[i + j] = a[i] * b[j] + a[i + 1] * b[4 + j] + a[i + 2] * b[8 + j] + a[i + 3] * b[12 + j];
  }
  return c;
}

function motion(revolute, axis, value) {
  const [x, y, z] = axis;
  if (!revolute) return [1, 0, 0, x * value, 0, 1, 0, y * value, 0, 0, 1, z * value, 0, 0, 0, 1];
  const c = Math.cos(value);
  const s = Math.sin(value);
  const d = 1 - c;
  return [
    c + x * x * d, x * y * d - z * s, x * z * d + y * s, 0,
    y * x * d + z * s, c + y * y * d, y * z * d - x * s, 0,
    z * x * d - y * s, z * y * d + x * s, c + z * z * d, 0,
    0, 0, 0, 1,
  ];
}

const HERE = [1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1];
const origin = (frame) => [frame[3], frame[7], frame[11]];
const moved = (frame, p) => [0, 4, 8].map((i) => frame[i] * p[0] + frame[i + 1] * p[1] + frame[i + 2] * p[2] + frame[i + 3]);
const turned = (frame, v) => [0, 4, 8].map((i) => frame[i] * v[0] + frame[i + 1] * v[1] + frame[i + 2] * v[2]);

// Moving frames of the joints, the flange and the tool at joint values in rad and m.
function standing(scene, q, tool) {
  const frames = [];
  const before = [];
  scene.parents.forEach((parent, i) => {
    before.push(times(parent < 0 ? HERE : frames[parent], scene.fixed[i]));
    frames.push(times(before[i], motion(scene.revolute[i], scene.axes[i], q[i])));
  });
  // What carries what, [from, to, width 0..1]: to where a joint is mounted, and on along a slide.
  const links = [];
  const count = frames.length + 1;
  scene.parents.forEach((parent, i) => {
    const width = 1 - (0.65 * i) / count;
    links.push([parent < 0 ? [0, 0, 0] : origin(frames[parent]), origin(before[i]), width]);
    if (!scene.revolute[i]) links.push([origin(before[i]), origin(frames[i]), 0.6 * width]);
  });
  const [flange, tip] = [times(frames[scene.tip], scene.flange), times(frames[scene.tip], scene.tools[tool])];
  links.push([origin(frames[scene.tip]), origin(flange), 1 - (0.65 * frames.length) / count]);
  links.push([origin(flange), origin(tip), 0.35]);
  return { frames, before, links, flange, tool: tip };
}
