// One's own numbers on a chart: read here, judged by the service, told in words.
import { element, marked, post } from "./calls.js";
import { PLANT } from "./plant.js";
import { build, guess, numberOf, SEPARATORS, tableOf } from "./sheet.js";
import { curl, laidOut, python } from "./takeaway.js";
import * as words from "./words.js";

const LONGEST_SHEET = 4_000_000;
const SHOWN_FAULTS = 8;
const SHOWN_ROWS = 4;

const byId = (id) => document.getElementById(id);
const form = byId("trial");
const sheet = byId("sheet");
const outcome = byId("outcome");
const chart = byId("chart");

// What was made of the text, and what the person at the page decided against it.
const state = { table: null, built: null, layout: "", headed: null, chosen: false, advised: 0, judged: 0 };

const wished = new URLSearchParams(location.search).get("chart");
if (wished && [...chart.options].some((option) => option.value === wished)) {
  chart.value = wished;
  state.chosen = true;
}

// 1. The numbers ------------------------------------------------------------------------------------

const decimal = () => form.decimal.value;

function readSheet() {
  const table = sheet.value.trim() ? tableOf(sheet.value, decimal(), state.headed) : null;
  state.table = table;
  outcome.hidden = true;
  byId("columns").hidden = !table;
  byId("asked").hidden = true;
  if (!table) {
    byId("read").replaceChildren();
    state.layout = "";
    return;
  }
  const between = SEPARATORS[table.separator];
  const parts = [`Read as ${count(table.rows.length, "row")} and ${count(table.width, "column")}${between ? `, told apart by ${between}` : ""}.`];
  if (table.open) parts.push("A quotation mark is opened and never closed, so the rest was read as one cell: look for a single \".");
  if (table.separator === "comma" && table.width === 2 && table.rows.every((row) => row.cells.length === 2 && row.cells.every((cell) => /^\d+$/.test(cell)))) {
    parts.push("Each line holds one comma. If it is a decimal comma, choose “a comma” above.");
  }
  byId("read").replaceChildren(element("p", { class: "soft" }, parts.join(" ")));
  byId("headed").checked = table.headed;
  const layout = `${table.headed}|${table.columns.map((column) => column.name).join("\t")}|${decimal()}`;
  if (layout !== state.layout) {
    state.layout = layout;
    offerColumns(table);
  }
  understand();
}

const count = (number, thing) => `${number} ${thing}${number === 1 ? "" : "s"}`;

function offerColumns(table) {
  const guessed = guess(table);
  const options = (select, none, chosen) => {
    const first = none ? [element("option", { value: "-1" }, none)] : [];
    select.replaceChildren(...first, ...table.columns.map((column) => element("option", { value: column.at }, column.name)));
    select.value = String(chosen);
  };
  options(byId("value"), null, guessed.value);
  options(byId("group"), null, Math.max(guessed.group, 0));
  options(byId("count"), null, guessed.count);
  options(byId("inspected"), "no column: one number for all, or none", guessed.inspected);
  options(byId("names"), "no column", guessed.names);
  byId("pieces").replaceChildren(
    element("legend", {}, "Pieces in"),
    ...table.columns.map((column) => {
      const box = element("input", { type: "checkbox", name: "piece", value: column.at });
      box.checked = guessed.pieces.includes(column.at);
      return element("label", {}, box, column.name);
    }),
  );
  form.form.value = guessed.form;
}

// 2. What the columns are ----------------------------------------------------------------------------

function choiceMade() {
  const at = (id) => Number(byId(id).value);
  const one = byId("inspected_number").value;
  return {
    form: form.form.value,
    names: at("names"),
    group: at("group"),
    value: at("value"),
    count: at("count"),
    inspected: at("inspected"),
    number: one === "" || !(Number(one) > 0) ? null : Number(one),
    counted: byId("counted").value,
    pieces: [...form.querySelectorAll("input[name=piece]:checked")].map((box) => Number(box.value)),
  };
}

function understand() {
  const choice = choiceMade();
  for (const part of byId("columns").querySelectorAll("[data-forms]")) {
    part.hidden = !part.dataset.forms.split(" ").includes(choice.form);
  }
  byId("same").hidden = choice.form !== "counts" || choice.inspected >= 0;
  const built = build(state.table, choice, decimal());
  state.built = built;
  outcome.hidden = true;
  showFaults(built.faults);
  showPreview(built);
  byId("asked").hidden = built.faults.length > 0;
  if (!built.faults.length) {
    offerCharts(built);
    advise(built);
  }
}

function showFaults(faults) {
  byId("faults").replaceChildren();
  if (!faults.length) return;
  const comma = faults.filter((fault) => fault.text.includes("“a comma”")).length;
  const list = faults.slice(0, SHOWN_FAULTS).map((fault) => {
    if (!fault.row) return element("li", {}, fault.text);
    const where = `Line ${fault.row.line}, ${fault.column.name}: `;
    return element("li", {}, element("strong", {}, where), fault.cell ? `“${fault.cell.slice(0, 60)}” ` : "", fault.text, " ",
      element("button", { type: "button", class: "quiet", click: () => showLine(fault.row) }, `Show line ${fault.row.line}`));
  });
  const more = faults.length - list.length;
  byId("faults").append(
    element("div", { class: "fault" },
      element("h3", {}, faults.length === 1 ? "One thing to mend first" : `${faults.length} things to mend first`),
      element("ul", {}, list),
      more > 0 ? element("p", {}, `And ${more} more.`) : null,
      comma > 1 && decimal() === "point"
        ? element("p", {}, element("button", { type: "button", class: "quiet", click: takeCommas }, "Read all of them with decimal commas"))
        : null),
  );
}

function takeCommas() {
  form.decimal.value = "comma";
  readSheet();
  form.querySelector("input[name=decimal]:checked").focus();
}

function showLine(row) {
  sheet.focus();
  sheet.setSelectionRange(row.start, row.end);
  const line = parseFloat(getComputedStyle(sheet).lineHeight);
  sheet.scrollTop = Math.max(0, (row.line - 3) * line);
}

function showPreview(built) {
  const main = built.counts ?? built.values;
  if (built.faults.length || !main.length) {
    byId("preview").replaceChildren();
    return;
  }
  const shown = main.slice(0, SHOWN_ROWS).map((row, at) => element("tr", {},
    element("th", { scope: "row" }, built.ids?.[at] ?? `point ${at + 1}`),
    [row].flat().map((value) => element("td", {}, value === null ? "–" : String(value))),
    Array.isArray(built.inspected) ? element("td", {}, `of ${built.inspected[at]}`) : null));
  byId("preview").replaceChildren(
    element("p", { class: "soft" }, [...built.notes, `Understood as ${count(main.length, built.form === "rows" || built.form === "long" ? "subgroup" : "point")}${main.length > SHOWN_ROWS ? ", which begin" : ""}:`].join(" ")),
    element("div", { class: "wide", role: "region", "aria-label": "The first rows as understood", tabindex: "0" }, element("table", {}, element("tbody", {}, shown))),
  );
}

// 3. The chart ---------------------------------------------------------------------------------------

const kindOf = (built) => ({ rows: "subgroups", long: "subgroups", singles: "singles", counts: "counts" })[built.form];

function offerCharts(built) {
  for (const option of chart.options) {
    option.hidden = option.disabled = !option.dataset.forms.split(" ").includes(kindOf(built));
  }
  if (chart.selectedOptions[0]?.disabled ?? true) {
    chart.value = [...chart.options].find((option) => !option.disabled).value;
    state.chosen = false;
  }
  chartChanged();
}

function chartChanged() {
  const { dataset, value } = chart.selectedOptions[0];
  byId("ruled").hidden = !dataset.ruled;
  byId("smallest").hidden = !["ewma", "cusum"].includes(value);
  byId("specification").hidden = kindOf(state.built) === "counts";
  byId("purpose").textContent = dataset.purpose;
}

async function advise(built) {
  const turn = ++state.advised;
  const sample = built.counts
    ? { counts: built.counts, counted: built.counted, ...(built.inspected === undefined ? {} : { inspected: built.inspected }) }
    : { values: built.values };
  const answer = await post("v1/charts/recommendation", { sample }, byId("key").value);
  if (turn !== state.advised) return;
  if (!answer.ok) {
    admit(answer);
    byId("advice").replaceChildren(element("p", { class: "soft" }, `No chart is recommended: ${sentence(answer.problem)}`));
    return;
  }
  const { chart: name, title, why, alternatives, beware } = answer.data;
  const here = [...chart.options].find((option) => option.value === name && !option.disabled);
  if (here && !state.chosen) {
    chart.value = name;
    chartChanged();
  }
  byId("advice").replaceChildren(
    element("div", { class: "advice" },
      element("p", {}, element("strong", {}, `Recommended: ${title} (${name}). `), marked(why)),
      here ? null : element("p", {}, "It needs more than this page asks for: see ", element("a", { href: `docs/reading/fit${stem(name)}Limits` }, "what it takes"), "."),
      element("details", {}, element("summary", {}, "What else would do, and what to beware of"),
        element("ul", {}, alternatives.map((one) => element("li", {}, element("strong", {}, one.chart), " ", marked(one.when)))),
        element("ul", {}, beware.map((one) => element("li", {}, marked(one)))))),
  );
}

const stem = (name) => name.split("-").map((part) => part[0].toUpperCase() + part.slice(1)).join("");

function requestMade() {
  const { built } = state;
  const name = chart.value;
  const data = {};
  if (built.counts) {
    data.counts = built.counts;
    if (built.inspected !== undefined && name !== "c") data.inspected = built.inspected;
    if (name === "np" && Array.isArray(built.inspected) && new Set(built.inspected).size === 1) data.inspected = built.inspected[0];
  } else if (built.form === "singles" && ["ewma", "cusum", "trend"].includes(name)) {
    data.individuals = built.values;
  } else {
    data.values = built.values;
  }
  if (built.ids) data.ids = built.ids;
  const body = { data };
  const called = characteristic();
  if (called) body.characteristic = called;
  if (!byId("ruled").hidden && byId("rules").value) body.rules = { published: byId("rules").value };
  if (!byId("smallest").hidden) body.detect = { shift: Number(byId("shift").value) || 1, in_control_arl: 370 };
  return body;
}

function characteristic() {
  const found = {};
  for (const [name, id] of [["name", "characteristic"], ["unit", "unit"]]) {
    const text = byId(id).value.trim();
    if (text) found[name] = text;
  }
  return Object.keys(found).length ? found : null;
}

/** The specification, null where none is given, or a fault in words. */
function specificationMade() {
  if (byId("specification").hidden) return null;
  const found = {};
  for (const name of ["lower", "target", "upper"]) {
    const text = byId(name).value.trim();
    if (!text) continue;
    const read = numberOf(text, decimal());
    if (!("value" in read)) return { fault: `The ${name} value of the specification, “${text}”, ${read.fault ?? "is not a number."}`, field: byId(name) };
    found[name] = read.value;
  }
  if (!Object.keys(found).length) return null;
  if (!("lower" in found) && !("upper" in found)) return { fault: "A specification has a lower or an upper limit, or both; a target alone is none.", field: byId("lower") };
  return { found };
}

// What came out --------------------------------------------------------------------------------------

async function judge(event) {
  event.preventDefault();
  if (!state.built || state.built.faults.length) {
    (byId("faults").querySelector("button") ?? sheet).focus();
    return;
  }
  const turn = ++state.judged;
  const path = `v1/charts/${chart.value}/limits`;
  const body = requestMade();
  const key = byId("key").value;
  const specification = specificationMade();
  if (specification?.fault) {
    present([element("h2", { id: "verdict", tabindex: "-1" }, "The specification cannot be read"), element("div", { class: "fault", role: "alert" }, specification.fault)]);
    specification.field.focus();
    return;
  }
  const study = specification && {
    ...(characteristic() ? { characteristic: characteristic() } : {}),
    data: { values: state.built.form === "singles" ? state.built.values.filter((value) => value !== null) : state.built.values },
    specification: specification.found,
  };
  const call = (where, what) => post(where, what, key);
  const [answer, picture, capability, drawn] = await Promise.all([
    call(path, body),
    call(`${path}/picture`, body),
    study ? call("v1/capability/measurements", study) : null,
    study ? call("v1/capability/measurements/picture", study) : null,
  ]);
  if (turn !== state.judged) return;
  if (!answer.ok) {
    admit(answer);
    present([
      element("h2", { id: "verdict", tabindex: "-1" }, "No chart yet"),
      refusal(answer.problem),
      ...takeaways("The request that was refused", path, body),
    ]);
  } else {
    present([
      ...told(answer.data, picture),
      ...(capability ? assessed(capability, drawn) : []),
      ...takeaways("Take the chart's request away", path, body),
      ...(study ? takeaways("Take the capability request away", "v1/capability/measurements", study) : []),
      ...(answer.data.limits ? kept(answer.data.limits) : []),
    ]);
  }
  byId("verdict").focus();
}

function present(parts) {
  outcome.replaceChildren(...parts.filter(Boolean));
  outcome.hidden = false;
}

function admit(answer) {
  if (answer.status === 401) byId("admission").hidden = false;
}

const sentence = (problem) => problem.errors?.[0]?.detail ?? problem.detail ?? problem.title;

/** A problem of the service, led back to the lines that were pasted. */
function refusal(problem) {
  const errors = problem.errors?.length ? problem.errors : [{ detail: problem.detail }];
  return element("div", { class: "fault", role: "alert" },
    element("h3", {}, problem.title),
    element("ul", {}, errors.slice(0, SHOWN_FAULTS).map((one) => {
      const row = lineOf(one.pointer);
      return element("li", {}, row ? element("strong", {}, `Line ${row.line}: `) : null, marked(one.detail), " ",
        row ? element("button", { type: "button", class: "quiet", click: () => showLine(row) }, `Show line ${row.line}`) : null);
    })),
    problem.request_id ? element("p", { class: "soft" }, `Request ${problem.request_id}`) : null);
}

function lineOf(pointer) {
  const found = /^#\/data\/[a-z_]+\/(\d+)(?:\/(\d+))?/.exec(pointer ?? "");
  if (!found) return null;
  const rows = state.built.lines[Number(found[1])];
  return rows ? rows[state.built.form === "long" ? Number(found[2] ?? 0) : 0] ?? rows[0] : null;
}

function told(answer, picture) {
  const found = answer.baseline;
  const parts = [];
  if (found) {
    parts.push(element("h2", { id: "verdict", tabindex: "-1", class: `verdict${found.signals_found ? " signal" : ""}` }, words.verdict(found)));
  } else {
    parts.push(element("h2", { id: "verdict", tabindex: "-1", class: "verdict" }, "Limits, without a baseline to judge."));
  }
  parts.push(picture.ok ? figure(picture.data) : element("p", {}, `There is no picture: ${sentence(picture.problem)}`));
  if (found?.signals.length) {
    parts.push(element("h3", {}, "Signals"), table(["Point", "Panel", "What was seen"], found.signals.slice(0, 200).map((signal) => [
      words.named(found, signal.index), words.spaced(signal.panel), signal.severity === "warning" ? `${signal.sentence} (a warning)` : signal.sentence])));
    parts.push(element("p", {}, "Look for the cause of each. Where it is found and belongs to that point alone, take the row out and judge again; a point without a cause stays."));
  }
  parts.push(...cautions(answer.cautions, "Cautions"));
  parts.push(element("h3", {}, "Limits"), table(["Panel", "Lower", "Centre", "Upper"], words.limits(answer)));
  const price = words.price(answer.performance);
  if (price) parts.push(element("p", {}, price));
  return parts;
}

function assessed(answer, drawn) {
  const parts = [element("h2", {}, "Against the specification")];
  if (!answer.ok) return [...parts, refusal(answer.problem)];
  const { rows, sentence: outside } = words.capability(answer.data);
  if (answer.data.status !== "established") parts.push(element("p", {}, `Status: ${words.spaced(answer.data.status)}. The cautions say why.`));
  if (drawn.ok) parts.push(figure(drawn.data));
  if (rows.length) parts.push(table(["Index", "Value", "95 % interval"], rows));
  if (outside) parts.push(element("p", {}, outside));
  return [...parts, ...cautions(answer.data.cautions, "Cautions on capability")];
}

function cautions(found, title) {
  if (!found?.length) return [];
  return [element("h3", {}, title), ...found.map((one) => element("div", { class: "caution" }, marked(one.sentence), " ", element("cite", {}, `(${one.reference})`)))];
}

function table(heads, rows) {
  return element("div", { class: "wide", role: "region", "aria-label": heads.join(", "), tabindex: "0" },
    element("table", { class: "numbers" },
      element("thead", {}, element("tr", {}, heads.map((one) => element("th", { scope: "col" }, one)))),
      element("tbody", {}, rows.map(([first, ...rest]) => element("tr", {}, element("th", { scope: "row" }, first), rest.map((one) => element("td", {}, one)))))));
}

function figure(svg) {
  const drawn = new DOMParser().parseFromString(svg, "image/svg+xml");
  const text = drawn.querySelector("desc")?.textContent ?? "The chart";
  return element("figure", {}, element("img", { alt: text, src: `data:image/svg+xml;charset=utf-8,${encodeURIComponent(svg)}` }));
}

function takeaways(title, path, body) {
  const url = new URL(path, document.baseURI).href;
  const keyed = byId("key").value !== "";
  return [
    element("h3", {}, title),
    taken("JSON", laidOut(body)),
    taken("curl", curl(url, body, keyed)),
    taken("Python", python(url, body, keyed)),
  ];
}

function kept(limits) {
  return [
    element("h3", {}, "Keep the limits"),
    element("p", {}, "Frozen as they are, and sent back with each new subgroup, they judge it: see “signals” of the same chart."),
    taken("Limits document", laidOut(limits)),
  ];
}

function taken(name, text) {
  const code = element("code", {}, text);
  const said = element("span", { role: "status", class: "soft" });
  const copy = async () => {
    try {
      await navigator.clipboard.writeText(text);
      said.textContent = " Copied.";
    } catch {
      getSelection().selectAllChildren(code);
      said.textContent = " Selected; copy it with the keyboard.";
    }
  };
  return element("details", {}, element("summary", {}, name),
    element("p", {}, element("button", { type: "button", class: "quiet", click: copy }, `Copy ${name}`), said),
    element("pre", { tabindex: "0" }, code));
}

// What is touched ------------------------------------------------------------------------------------

function take(text) {
  if (text.length > LONGEST_SHEET) {
    byId("read").replaceChildren(element("div", { class: "fault" }, "This is more than a page can show. Send it to the API in a request of its own: up to 32 megabytes."));
    return;
  }
  sheet.value = text;
  state.headed = null;
  readSheet();
}

async function takeFile(file) {
  if (!file) return;
  if (file.size > LONGEST_SHEET) return take(" ".repeat(LONGEST_SHEET + 1));
  const bytes = new Uint8Array(await file.arrayBuffer());
  if (bytes[0] === 0x50 && bytes[1] === 0x4b) return refuseFile("is a spreadsheet's own file. Save it as CSV, or copy the cells and paste them.");
  const wide = bytes[0] === 0xff && bytes[1] === 0xfe;
  try {
    const text = new TextDecoder(wide ? "utf-16le" : "utf-8", { fatal: true }).decode(bytes);
    if (text.includes("\0")) return refuseFile("is no text. Save the table as CSV, or copy the cells and paste them.");
    return take(text);
  } catch {
    return take(new TextDecoder("windows-1252").decode(bytes));
  }
  function refuseFile(why) {
    byId("read").replaceChildren(element("div", { class: "fault", role: "alert" }, `“${file.name}” ${why}`));
  }
}

function example(name) {
  const { characteristic: called, unit, specification, sheet: text } = PLANT[name];
  byId("characteristic").value = called;
  byId("unit").value = unit;
  for (const side of ["lower", "target", "upper"]) byId(side).value = specification[side] ?? "";
  form.decimal.value = "point";
  state.chosen = false;
  state.layout = "";
  take(text);
}

let waiting = 0;
sheet.addEventListener("input", () => {
  clearTimeout(waiting);
  waiting = setTimeout(readSheet, 200);
});
for (const radio of form.querySelectorAll("input[name=decimal]")) radio.addEventListener("change", readSheet);
byId("headed").addEventListener("change", (event) => {
  state.headed = event.target.checked;
  readSheet();
});
byId("columns").addEventListener("change", (event) => {
  if (event.target.id !== "headed") understand();
});
chart.addEventListener("change", () => {
  state.chosen = true;
  chartChanged();
});
byId("file").addEventListener("change", (event) => takeFile(event.target.files[0]));
for (const button of form.querySelectorAll("[data-example]")) button.addEventListener("click", () => example(button.dataset.example));
const drop = byId("drop");
for (const name of ["dragenter", "dragover"]) {
  drop.addEventListener(name, (event) => {
    event.preventDefault();
    drop.classList.add("over");
  });
}
drop.addEventListener("dragleave", () => drop.classList.remove("over"));
drop.addEventListener("drop", (event) => {
  event.preventDefault();
  drop.classList.remove("over");
  const file = event.dataTransfer.files[0];
  if (file) takeFile(file);
  else take(event.dataTransfer.getData("text/plain"));
});
form.addEventListener("submit", judge);
form.hidden = false;
if (sheet.value.trim()) readSheet();
