// The shapes that stand for what a source is doing, so that no colour carries a meaning alone. Canvas only, no data.

/** What each role of a lane is called, and what it means to a person. */
export const ROLES = {
  holding: "holds the output",
  silent: "silent",
  late: "sends late",
  ahead: "ahead of the clock",
  expected: "expected, not heard yet",
  excused: "excused",
  other: "",
};

function circle(context, x, y, radius) {
  context.beginPath();
  context.arc(x, y, radius, 0, 2 * Math.PI);
}

function cross(context, x, y, radius) {
  context.beginPath();
  context.moveTo(x - radius, y - radius);
  context.lineTo(x + radius, y + radius);
  context.moveTo(x + radius, y - radius);
  context.lineTo(x - radius, y + radius);
  context.stroke();
}

const DRAW = {
  holding(context, x, y, colour) {
    context.fillStyle = colour.hold;
    context.fillRect(x - 5, y - 5, 10, 10);
  },
  silent(context, x, y, colour) {
    context.strokeStyle = colour.silent;
    context.lineWidth = 2.5;
    circle(context, x, y, 4);
    context.stroke();
  },
  late(context, x, y, colour) {
    context.strokeStyle = colour.late;
    context.lineWidth = 2.5;
    cross(context, x, y, 4);
  },
  ahead(context, x, y, colour) {
    context.strokeStyle = colour.ahead;
    context.lineWidth = 2.5;
    context.beginPath();
    for (const shift of [-3, 2]) {
      context.moveTo(x + shift - 1, y - 4);
      context.lineTo(x + shift + 3, y);
      context.lineTo(x + shift - 1, y + 4);
    }
    context.stroke();
  },
  expected(context, x, y, colour) {
    context.strokeStyle = colour.quiet;
    context.lineWidth = 2;
    context.setLineDash([3, 2]);
    circle(context, x, y, 4.5);
    context.stroke();
    context.setLineDash([]);
  },
  excused(context, x, y, colour) {
    context.strokeStyle = colour.quiet;
    context.lineWidth = 2;
    circle(context, x, y, 4.5);
    context.stroke();
    context.beginPath();
    context.moveTo(x - 3, y + 3);
    context.lineTo(x + 3, y - 3);
    context.stroke();
  },
  other(context, x, y, colour) {
    context.fillStyle = colour.strand;
    circle(context, x, y, 3);
    context.fill();
  },
};

/** The shape of a role around a point, 10 pixels wide. */
export function glyph(context, role, x, y, colour) {
  (DRAW[role] ?? DRAW.other)(context, x, y, colour);
}

/** A late arrival: a small cross. */
export function lateMark(context, x, y) {
  cross(context, x, y, 3);
}

/** The newest event of a source: a lozenge; hollow where it is not waited for. */
export function lozenge(context, x, y, colour, solid) {
  context.beginPath();
  context.moveTo(x, y - 6);
  context.lineTo(x + 4, y);
  context.lineTo(x, y + 6);
  context.lineTo(x - 4, y);
  context.closePath();
  if (solid) {
    context.fillStyle = colour;
    context.fill();
  } else {
    context.strokeStyle = colour;
    context.lineWidth = 1.5;
    context.stroke();
  }
}

/** An act of a person: a flag on a pole whose foot is the instant. */
export function flag(context, x, foot, height, colour) {
  context.strokeStyle = colour;
  context.fillStyle = colour;
  context.lineWidth = 1.5;
  context.beginPath();
  context.moveTo(x, foot);
  context.lineTo(x, foot - height);
  context.stroke();
  context.beginPath();
  context.moveTo(x, foot - height);
  context.lineTo(x + 8, foot - height + 4);
  context.lineTo(x, foot - height + 8);
  context.fill();
}
