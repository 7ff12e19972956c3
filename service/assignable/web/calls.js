// Every call this page makes goes through here: the public API of the same service, and nothing else.

/** Posts a body; answers {ok, data} with the text for a picture, or {ok: false, status, problem}. */
export async function post(path, body, key = "") {
  const headers = { "Content-Type": "application/json" };
  if (key) headers["X-API-Key"] = key;
  let answer;
  try {
    answer = await fetch(path, { method: "POST", headers, body: JSON.stringify(body), credentials: "same-origin" });
    const text = await answer.text();
    if (answer.ok) {
      return { ok: true, data: /json/.test(answer.headers.get("Content-Type") || "") ? JSON.parse(text) : text };
    }
    return { ok: false, status: answer.status, problem: read(text, answer.status) };
  } catch {
    return {
      ok: false,
      status: 0,
      problem: { title: "No answer", detail: "The service cannot be reached. Nothing is lost here: try again when it can." },
    };
  }
}

function read(text, status) {
  try {
    return JSON.parse(text);
  } catch {
    return { title: "No answer", detail: `Something between this page and the service answered with status ${status}.` };
  }
}

/** An element with a class, attributes and what is in it; texts stay texts. */
export function element(name, properties = {}, ...inside) {
  const made = document.createElement(name);
  for (const [key, value] of Object.entries(properties)) {
    if (key === "class") made.className = value;
    else if (typeof value === "function") made.addEventListener(key, value);
    else if (value !== null && value !== undefined) made.setAttribute(key, value);
  }
  made.append(...inside.flat().filter((one) => one !== null && one !== undefined));
  return made;
}

/** A text of the service, whose names between backticks become code. */
export function marked(text) {
  return text.split("`").map((part, at) => (at % 2 ? element("code", {}, part) : part));
}
