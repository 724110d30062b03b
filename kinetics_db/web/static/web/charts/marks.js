// Marker shapes, one for each species: the same as in marks.py, which draws the small pictures of the server.

const COLOURS = 8;
const PLUS = [
  [-0.4, -1.1], [0.4, -1.1], [0.4, -0.4], [1.1, -0.4], [1.1, 0.4], [0.4, 0.4], [0.4, 1.1], [-0.4, 1.1],
  [-0.4, 0.4], [-1.1, 0.4], [-1.1, -0.4], [-0.4, -0.4],
];

function star(points, inner) {
  return Array.from({ length: 2 * points }, (_, i) => {
    const angle = (Math.PI * i) / points - Math.PI / 2;
    const length = i % 2 === 0 ? 1.3 : inner;
    return [length * Math.cos(angle), length * Math.sin(angle)];
  });
}

// null is a circle, anything else the corners of a polygon.
const SHAPES = [
  null,
  [[-0.9, -0.9], [0.9, -0.9], [0.9, 0.9], [-0.9, 0.9]],
  [[0, -1.2], [1.15, 0.85], [-1.15, 0.85]],
  [[0, -1.3], [1.1, 0], [0, 1.3], [-1.1, 0]],
  [[0, 1.2], [1.15, -0.85], [-1.15, -0.85]],
  PLUS,
  star(5, 0.55),
  PLUS.map(([a, b]) => [(a - b) * 0.75, (a + b) * 0.75]),
];
// Lines of species without points are told apart by their dashes.
const DASHES = [[], [9, 4], [2, 3], [9, 3, 2, 3], [5, 3], [14, 4], [2, 6], [14, 3, 2, 3, 2, 3]];

export const colourOf = (position) => `c${position % COLOURS}`;
export const shapeOf = (position) => SHAPES[(position + Math.floor(position / COLOURS)) % SHAPES.length];
export const dashesOf = (position) => DASHES[(position + Math.floor(position / COLOURS)) % DASHES.length];

/** Add a marker to a canvas path. */
export function addTo(path, shape, x, y, r) {
  if (shape === null) {
    path.moveTo(x + r, y);
    path.arc(x, y, r, 0, 2 * Math.PI);
    return;
  }
  path.moveTo(x + r * shape[0][0], y + r * shape[0][1]);
  for (let i = 1; i < shape.length; i++) path.lineTo(x + r * shape[i][0], y + r * shape[i][1]);
  path.closePath();
}

/** A marker as the `d` of an SVG path. */
export function pathOf(shape, x, y, r) {
  const short = (value) => value.toFixed(1).replace(/^-0\.0$/, "0.0");
  if (shape === null) {
    const [a, d] = [short(r), short(2 * r)];
    return `M${short(x - r)} ${short(y)}a${a} ${a} 0 1 0 ${d} 0a${a} ${a} 0 1 0 ${short(-2 * r)} 0Z`;
  }
  return `M${shape.map(([dx, dy]) => `${short(x + r * dx)} ${short(y + r * dy)}`).join("L")}Z`;
}
