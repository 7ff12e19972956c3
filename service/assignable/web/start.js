// The start page: whether the service is well, and which chart answers to the data.
import { element, marked, post } from "./calls.js";

const health = document.getElementById("health");
fetch("health/ready", { headers: { Accept: "application/json" } }).then(
  (answer) => {
    health.className = answer.ok ? "well" : "ill";
    health.prepend(answer.ok ? "Ready: it computes rightly. " : "Not ready: it takes no work at present. ");
  },
  () => {
    health.className = "ill";
    health.prepend("It does not answer. ");
  },
);

const form = document.getElementById("chooser");
const choice = document.getElementById("choice");
const of = (one) => !one.dataset.kinds || one.dataset.kinds.split(" ").includes(form.kind.value);

function fit() {
  for (const part of form.querySelectorAll("[data-kinds]")) part.hidden = !of(part);
}

function description() {
  const told = { kind: form.kind.value };
  for (const field of form.elements) {
    if (!field.name || field.name === "kind" || field.closest("[hidden]")) continue;
    if (field.type === "checkbox") {
      if (field.checked) told[field.name] = true;
    } else if (field.type === "number") {
      if (field.value !== "") told[field.name] = Number(field.value);
    } else if (field.value !== "by-chance") told[field.name] = field.value;
  }
  return told;
}

form.kind.addEventListener("change", fit);
form.addEventListener("submit", async (event) => {
  event.preventDefault();
  const answer = await post("v1/charts/recommendation", { description: description() });
  if (!answer.ok) {
    const faults = answer.problem.errors ?? [];
    choice.replaceChildren(
      element("div", { class: "fault" },
        element("h3", {}, answer.problem.title),
        element("ul", {}, (faults.length ? faults : [answer.problem]).map((fault) => element("li", {}, marked(fault.detail))))),
    );
    return;
  }
  const { chart, title, why, alternatives, beware } = answer.data;
  choice.replaceChildren(
    element("div", { class: "advice" },
      element("h3", {}, `${title} (${chart})`),
      element("p", {}, marked(why)),
      alternatives.length ? element("p", {}, "What else would do:") : null,
      alternatives.length ? element("ul", {}, alternatives.map((one) => element("li", {}, element("strong", {}, one.chart), " ", marked(one.when)))) : null,
      element("p", {}, "Beware:"),
      element("ul", {}, beware.map((one) => element("li", {}, marked(one)))),
      element("p", {},
        choice.dataset.offered.split(" ").includes(chart)
          ? [element("a", { href: `try?chart=${encodeURIComponent(chart)}` }, "Try it with your numbers"), " · "]
          : null,
        element("a", { href: `docs/reading/fit${stem(chart)}Limits` }, "Read what it takes"))),
  );
});

const stem = (chart) => chart.split("-").map((part) => part[0].toUpperCase() + part.slice(1)).join("");

fit();
form.hidden = false;
