// Text pasted from a spreadsheet, or from a file, to numbers; and where that cannot be, what is wrong and where.

const MISSING = /^(?:|-|–|—|\*|\.|n\/?a|nan|null|none|missing)$/i;
const NAMED = /^(?:id|no\.?|nr\.?|#|name|car|batch|lot|tray|shift|day|date|time|subgroup|group|sample|point|serial)\b/i;
const INSPECTED = /inspect|fired|checked|tested|sample size|^n$|^of$|area|total|size/i;
export const SEPARATORS = { tab: "tabs", semicolon: "semicolons", comma: "commas", space: "spaces", none: "" };
const MARKS = { tab: "\t", semicolon: ";", comma: "," };

/** Rows of cells; each row knows its line and where it stands in the text. */
export function rowsOf(text, decimal) {
  const separator = separatorOf(text, decimal);
  const mark = MARKS[separator];
  const rows = [];
  let [cells, cell, quoted, line, start, first] = [[], "", false, 1, 0, 1];
  const finish = (end) => {
    cells.push(cell);
    if (separator === "space") cells = cells[0].trim().split(/\s+/);
    cells = cells.map((one) => one.replace(/^[\s\u00a0\ufeff]+|[\s\u00a0]+$/g, ""));
    if (cells.some((one) => one !== "")) rows.push({ line: first, start, end, cells });
    [cells, cell, start, first] = [[], "", end + 1, line + 1];
  };
  for (let at = 0; at < text.length; at++) {
    const letter = text[at];
    if (quoted) {
      if (letter !== '"') cell += letter;
      else if (text[at + 1] === '"') cell += text[++at];
      else quoted = false;
    } else if (letter === '"' && cell.trim() === "") {
      [quoted, cell] = [true, ""];
    } else if (letter === mark) {
      cells.push(cell);
      cell = "";
    } else if (letter === "\n") {
      finish(at);
    } else if (letter !== "\r") {
      cell += letter;
    }
    if (letter === "\n") line++;
  }
  finish(text.length);
  return { separator, rows, open: quoted };
}

function separatorOf(text, decimal) {
  const lines = text.split("\n").filter((line) => line.trim() !== "").slice(0, 200);
  const share = (mark) => lines.filter((line) => line.includes(mark)).length / Math.max(lines.length, 1);
  if (share("\t") > 0.5) return "tab";
  if (share(";") > 0.5) return "semicolon";
  if (decimal === "point" && share(",") > 0.5) return "comma";
  const spaced = lines.slice(1).concat(lines.length === 1 ? lines : []);
  const numbers = (line) => line.trim().split(/\s+/).filter((part) => "value" in numberOf(part, decimal)).length;
  if (spaced.length && spaced.every((line) => numbers(line) > 1)) return "space";
  return "none";
}

/** {value}, {missing: true} or {fault: a sentence that says what to do}. */
export function numberOf(cell, decimal) {
  if (MISSING.test(cell)) return { missing: true };
  let text = cell.replace(/^[\u2212\u2013]/, "-");
  if (decimal === "comma") {
    if (/^[-+]?\d[\d.]*\.\d/.test(text) && !text.includes(",")) {
      return { fault: "has a decimal point, and a decimal comma was chosen above. Choose the mark the numbers are written with." };
    }
    if (/\..*,/.test(text)) return { fault: "has points between its thousands. Take them out in the spreadsheet." };
    text = text.replace(",", ".");
  }
  if (/^[-+]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?$/i.test(text)) {
    const value = Number(text);
    return Number.isFinite(value) && Math.abs(value) <= 1e300 ? { value } : { fault: "is too large for a number." };
  }
  return { fault: faultOf(text) };
}

function faultOf(text) {
  if (/^[-+]?\d{1,3}(?:,\d{3})+\.\d+$/.test(text)) return "has commas between its thousands. Take them out in the spreadsheet.";
  if (/^[-+]?\d*,\d+$/.test(text)) {
    return "has a comma. If that is how decimals are written here, choose “a comma” above; if it sets off thousands, take it out.";
  }
  if (/^[-+]?\d[\d\s\u00a0'’]*[\s\u00a0'’]\d/.test(text)) return "has gaps within. Take out what sets off the thousands; one number a cell.";
  if (/^[<>≤≥]/.test(text)) {
    return "is a result beyond a limit of detection, which no point of a chart can be. Leave it empty here; POST /v1/capability/measurements takes such results.";
  }
  if (/^[-+]?(?:\d+[.,]?\d*|\.\d+)\s*[^\d\s.,]/.test(text)) return "carries a unit or a remark. Leave the number alone; the unit has its own box below.";
  if (/^#/.test(text)) return "is an error of the spreadsheet. Mend the formula, or empty the cell.";
  return "is not a number. Empty the cell if nothing was measured, or choose other columns.";
}

/** The sheet with its columns: what each is called, and whether it holds numbers, names or whole counts. */
export function tableOf(text, decimal, headed = null) {
  const { separator, rows, open } = rowsOf(text, decimal);
  const width = Math.max(0, ...rows.map((row) => row.cells.length));
  const [first, ...rest] = rows;
  const numeric = (cell) => "value" in numberOf(cell, decimal);
  const looksLike = Boolean(first) && rest.length > 0 && first.cells.some((cell, at) =>
    !MISSING.test(cell) && !/\d/.test(cell) && rest.some((row) => numeric(row.cells[at] ?? "")));
  const named = headed ?? (looksLike || (Boolean(first) && rest.length > 0 && NAMED.test(first.cells[0]) && !/\d/.test(first.cells[0])));
  const body = named ? rest : rows;
  const columns = Array.from({ length: width }, (_, at) => {
    const cells = body.map((row) => row.cells[at] ?? "").filter((cell) => !MISSING.test(cell));
    const values = cells.map((cell) => numberOf(cell, decimal).value).filter((value) => value !== undefined);
    const whole = values.length > 0 && values.every(Number.isInteger);
    const heading = named ? first.cells[at] ?? "" : "";
    return {
      at,
      name: heading || `column ${at + 1}`,
      heading,
      numbers: cells.length > 0 && cells.filter((cell) => /\d/.test(cell) && !/^[^\d<>]*[a-z]/i.test(cell)).length >= cells.length / 2 && !dated(cells),
      whole,
      repeats: new Set(cells).size < cells.length,
      counts: whole && values.length > 1 && values.every((value, index) => index === 0 || value === values[index - 1] + 1),
      values,
    };
  });
  return { separator, open, headed: named, rows: body, columns, width };
}

const dated = (cells) => cells.every((cell) => /^\d{1,4}[-/.]\d{1,2}[-/.]\d{1,4}/.test(cell) || /^\d{1,2}:\d{2}/.test(cell));

/** What the columns look like; whoever pasted them has the last word. */
export function guess(table) {
  const { columns } = table;
  const naming = columns.filter((column) => !column.numbers || (columns.length > 1 && (column.counts || NAMED.test(column.heading)) && column.whole));
  const measured = columns.filter((column) => !naming.includes(column));
  const names = naming[0]?.at ?? -1;
  const base = { names, group: names, value: measured[0]?.at ?? 0, count: measured[0]?.at ?? 0, inspected: -1, pieces: measured.map((column) => column.at) };
  const [one, two] = measured;
  if (measured.length === 2 && one.whole && two.whole) {
    const [small, large] = INSPECTED.test(one.heading) ? [two, one] : [one, two];
    const within = large.values.length === small.values.length && small.values.every((value, at) => value <= large.values[at] && value >= 0);
    if (within) return { ...base, form: "counts", count: small.at, inspected: large.at };
  }
  if (measured.length > 1) return { ...base, form: "rows" };
  if (names >= 0 && columns[names].repeats) return { ...base, form: "long" };
  return { ...base, form: "singles" };
}

/** What to send, or the faults. `choice` is what the columns are, as guess() has it. */
export function build(table, choice, decimal) {
  const faults = [];
  const notes = [];
  const read = (row, at, extra = null) => {
    const cell = row.cells[at] ?? "";
    const found = numberOf(cell, decimal);
    if ("missing" in found) return null;
    const fault = found.fault ?? (extra === null ? null : extra(found.value));
    if (fault) faults.push({ row, column: table.columns[at], cell, text: fault });
    return found.value ?? null;
  };
  const named = choice.names >= 0 && choice.form !== "long";
  const result = { form: choice.form, faults, notes, lines: table.rows.map((row) => [row]), columns: [choice.value] };
  if (named) result.ids = table.rows.map((row, at) => row.cells[choice.names] || `row ${at + 1}`);
  if (choice.form === "rows") {
    if (choice.pieces.length < 2) faults.push({ text: "A subgroup has two pieces or more. Choose two columns or more, or say that a row is one value." });
    result.values = table.rows.map((row) => choice.pieces.map((at) => read(row, at)));
    result.columns = choice.pieces;
  } else if (choice.form === "long") {
    grouped(table, choice, read, result);
  } else if (choice.form === "singles") {
    result.values = table.rows.map((row) => read(row, choice.value));
  } else {
    const whole = (value) => (Number.isInteger(value) && value >= 0 ? null : "is no count. Counts are whole numbers, 0 or more.");
    result.counts = table.rows.map((row) => read(row, choice.count, whole));
    result.columns = [choice.count];
    result.counted = choice.counted;
    if (choice.inspected >= 0) {
      const some = (value) => (value > 0 ? null : "inspected is nothing at all. Leave the row out.");
      result.inspected = table.rows.map((row) => {
        const value = read(row, choice.inspected, some);
        if (value === null && !MISSING.test(row.cells[choice.count] ?? "") && MISSING.test(row.cells[choice.inspected] ?? "")) {
          faults.push({ row, column: table.columns[choice.inspected], cell: "", text: "says nothing, and a count without what was inspected tells nothing. Fill it in, or leave the row out." });
        }
        return value ?? 1;
      });
      if (choice.counted === "units") {
        result.counts.forEach((count, at) => {
          if (count !== null && count > result.inspected[at]) {
            faults.push({ row: table.rows[at], column: table.columns[choice.count], cell: String(count), text: `is more than the ${result.inspected[at]} inspected. Are the two columns the other way round? Or do they count nonconformities, any number on a unit?` });
          }
        });
      }
    } else if (choice.number !== null) {
      result.inspected = choice.number;
    } else if (choice.counted === "units") {
      faults.push({ text: "How many were inspected? Choose the column, or give the one number for all." });
    }
  }
  const main = result.counts ?? result.values;
  const missing = main.flat().filter((value) => value === null).length;
  if (missing) notes.push(`${missing} empty ${missing === 1 ? "cell is" : "cells are"} taken as not measured.`);
  if (!faults.length && main.flat().every((value) => value === null)) {
    faults.push({ text: "There are no numbers in these columns. Choose others above." });
  }
  return result;
}

function grouped(table, choice, read, result) {
  const groups = new Map();
  let before = null;
  let scattered = 0;
  for (const row of table.rows) {
    const name = row.cells[choice.group] ?? "";
    const value = read(row, choice.value);
    if (name === "") {
      result.faults.push({ row, column: table.columns[choice.group], cell: "", text: "does not say to which subgroup the value belongs. Fill it in." });
      continue;
    }
    if (!groups.has(name)) groups.set(name, { values: [], rows: [] });
    else if (before !== name) scattered++;
    groups.get(name).values.push(value);
    groups.get(name).rows.push(row);
    before = name;
  }
  const size = Math.max(0, ...[...groups.values()].map((group) => group.values.length));
  if (groups.size && size < 2) {
    result.faults.push({ text: `Every row has a subgroup of its own in ${table.columns[choice.group].name}. Choose the column that repeats, or say that a row is one value.` });
  }
  if (scattered) result.notes.push("Some subgroups do not stand together; each was put where it first appears.");
  result.ids = [...groups.keys()];
  result.lines = [...groups.values()].map((group) => group.rows);
  result.values = [...groups.values()].map((group) => [...group.values, ...Array(size - group.values.length).fill(null)]);
}
