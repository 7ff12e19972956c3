// The exact request, to send from elsewhere.

const LONGEST_ARGUMENT = 100_000;

/** JSON for people: a member a line, a row of numbers a line. */
export function laidOut(value, indent = "") {
  const inner = indent + "  ";
  if (Array.isArray(value)) {
    if (!value.some((one) => one !== null && typeof one === "object")) return `[${value.map((one) => JSON.stringify(one)).join(", ")}]`;
    return `[\n${value.map((one) => inner + laidOut(one, inner)).join(",\n")}\n${indent}]`;
  }
  if (value !== null && typeof value === "object" && Object.keys(value).length) {
    const members = Object.entries(value).map(([name, one]) => `${inner}${JSON.stringify(name)}: ${laidOut(one, inner)}`);
    return `{\n${members.join(",\n")}\n${indent}}`;
  }
  return JSON.stringify(value);
}

export function curl(url, body, keyed) {
  const text = JSON.stringify(body);
  const data = text.length > LONGEST_ARGUMENT ? "@request.json" : `'${text.replaceAll("'", "'\\''")}'`;
  const key = keyed ? " -H 'X-API-Key: '\"$API_KEY\"" : "";
  const note = text.length > LONGEST_ARGUMENT ? "# request.json holds the JSON above\n" : "";
  return `${note}curl -s -H 'Content-Type: application/json'${key} --data ${data} \\\n  '${url}'`;
}

export function python(url, body, keyed) {
  const key = keyed ? ', "X-API-Key": os.environ["API_KEY"]' : "";
  return `import json
${keyed ? "import os\n" : ""}import urllib.error
import urllib.request

# null is a piece that is missing.
body = r"""
${laidOut(body)}
"""

request = urllib.request.Request(
    ${JSON.stringify(url)},
    data=body.encode(),
    headers={"Content-Type": "application/json"${key}},
)
try:
    with urllib.request.urlopen(request) as answer:
        print(json.dumps(json.load(answer), indent=2))
except urllib.error.HTTPError as problem:
    print(problem.read().decode())
`;
}
