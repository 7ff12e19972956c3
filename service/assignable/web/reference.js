"use strict";

// An SVG answer is shown as the picture it is. Inside <img> it can run no script.
const PictureAnswer = () => ({
  wrapComponents: {
    responseBody: (Original, system) => (props) => {
      const element = system.React.createElement;
      const original = element(Original, props);
      if (!/^image\/svg\+xml/i.test(props.contentType || "") || typeof props.content !== "string") {
        return original;
      }
      const source = "data:image/svg+xml;charset=utf-8," + encodeURIComponent(props.content);
      return element("div", null, element("img", { alt: "The picture the service answered", src: source }), original);
    },
  },
});

// The library's own way to follow references reads the whole document anew for each operation, which takes
// seconds with one as large as ours. All of ours point into the document itself, and none comes back to itself.
const follow = (document, pointer) =>
  pointer.slice(2).split("/").reduce((here, step) => here[step.replaceAll("~1", "/").replaceAll("~0", "~")], document);

const inlined = (part, document) => {
  if (Array.isArray(part)) return part.map((one) => inlined(one, document));
  if (part === null || typeof part !== "object") return part;
  if (typeof part.$ref === "string" && part.$ref.startsWith("#/")) {
    return { ...inlined(follow(document, part.$ref), document), $$ref: part.$ref };
  }
  return Object.fromEntries(Object.entries(part).map(([name, one]) => [name, inlined(one, document)]));
};

const OwnReferences = () => ({
  fn: {
    resolveSubtree: async (document, path) => ({
      spec: inlined(path.reduce((here, step) => here?.[step], document), document),
      errors: [],
    }),
  },
});

// The library names some of its choices to the eye alone.
const NAMES = { ".examples-select-element": "Example", ".content-type": "Media type", ".body-param__text": "Request body" };
const name = () => {
  for (const [selector, text] of Object.entries(NAMES)) {
    for (const one of document.querySelectorAll(`${selector}:not([aria-label])`)) one.setAttribute("aria-label", text);
  }
  // What scrolls must be reached by keyboard.
  for (const one of document.querySelectorAll("pre.microlight:not([tabindex])")) one.setAttribute("tabindex", "0");
};

window.addEventListener("load", () => {
  new MutationObserver(name).observe(document.getElementById("reference"), { childList: true, subtree: true });
  SwaggerUIBundle({
    url: "openapi.json",
    dom_id: "#reference",
    deepLinking: true,
    validatorUrl: null,
    tryItOutEnabled: true,
    docExpansion: "none",
    // Its colours are too pale, and long answers take seconds to colour.
    syntaxHighlight: false,
    defaultModelsExpandDepth: 0,
    presets: [SwaggerUIBundle.presets.apis],
    plugins: [PictureAnswer, OwnReferences],
    layout: "BaseLayout",
  });
});
