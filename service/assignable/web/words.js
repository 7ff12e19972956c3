// Answers in words.

/** A number as people read it. */
export function number(value) {
  if (value === null || value === undefined) return "none";
  if (Number.isInteger(value)) return String(value);
  return String(Number(value.toPrecision(Math.abs(value) >= 1000 ? 7 : 5)));
}

export const spaced = (name) => name.replaceAll("_", " ").replaceAll("-", " ");

const many = (count, one, more) => `${count} ${count === 1 ? one : more}`;

/** How a point is called: by its own name, or by its place. */
export const named = (found, index) => found.ids?.[index] ?? `point ${index + 1}`;

/** The verdict on a baseline in a sentence. */
export function verdict(found) {
  const points = Math.max(...Object.values(found.panels).map((panel) => panel.index.length));
  if (!found.signals_found) {
    return `In control: ${points === 1 ? "the one point gives" : `none of the ${points} points gives`} a signal.`;
  }
  const actions = found.signals.filter((signal) => signal.severity === "action").length;
  const first = found.signals[0];
  const where = named(found, first.index);
  return `${actions ? "Not in control" : "Only warnings"}: ${many(found.signals_found, "signal", "signals")} among ${many(points, "point", "points")}, the first at ${where}.`;
}

/** Rows of panel, lower, centre, upper; limits that follow the size of each sample as their range. */
export function limits(answer) {
  return Object.entries(answer.limits.panels).map(([panel, line]) => {
    const drawn = answer.baseline?.panels?.[panel];
    const of = (side) => {
      if (line[side] !== null && line[side] !== undefined) return number(line[side]);
      const all = drawn?.[side] ?? [];
      const [least, most] = [Math.min(...all), Math.max(...all)];
      return all.length && least !== most ? `${number(least)} to ${number(most)}` : "none";
    };
    return [spaced(panel), of("lower"), of("centre"), of("upper")];
  });
}

/** What the chart costs in false alarms and how soon it sees a shift. */
export function price(performance) {
  if (!performance) return null;
  const parts = [];
  if (performance.in_control_arl) {
    parts.push(`In control, it gives one false alarm in about ${number(Math.round(performance.in_control_arl))} points.`);
  }
  const one = performance.shifts?.find((shift) => shift.shift === 1 || shift.shift === 1.5);
  if (one?.arl) {
    const unit = performance.shift_unit ? ` (in ${spaced(performance.shift_unit)})` : "";
    parts.push(`A lasting shift of ${number(one.shift)}${unit} is seen after ${number(Number(one.arl.toPrecision(3)))} points on average.`);
  }
  return parts.join(" ") || null;
}

const INDICES = [["cp", "Cp"], ["cpk", "Cpk"], ["pp", "Pp"], ["ppk", "Ppk"], ["cpm", "Cpm"]];

/** Rows of index, value and interval, and a sentence on what falls outside. */
export function capability(answer) {
  const found = answer.capability;
  if (!found) return { rows: [], sentence: null };
  const rows = INDICES.filter(([name]) => found[name]?.value !== null && found[name]?.value !== undefined).map(([name, title]) => {
    const index = found[name];
    return [title, index.value.toFixed(2), index.lower === null ? "none" : `${index.lower.toFixed(2)} to ${index.upper.toFixed(2)}`];
  });
  const outside = found.expected_total;
  const sentence = outside?.total_ppm === undefined || outside.total_ppm === null
    ? null
    : `Expected outside the specification: ${number(Number(outside.total_ppm.toPrecision(3)))} in a million` +
      (outside.total_upper_ppm ? `, with ${Math.round(100 * (found.confidence ?? 0.95))} % confidence between ${number(Number(outside.total_lower_ppm.toPrecision(2)))} and ${number(Number(outside.total_upper_ppm.toPrecision(2)))}.` : ".");
  return { rows, sentence };
}
