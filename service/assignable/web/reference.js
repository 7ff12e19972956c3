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

window.addEventListener("load", () => {
  SwaggerUIBundle({
    url: "openapi.json",
    dom_id: "#reference",
    deepLinking: true,
    validatorUrl: null,
    tryItOutEnabled: true,
    docExpansion: "list",
    defaultModelsExpandDepth: 0,
    presets: [SwaggerUIBundle.presets.apis],
    plugins: [PictureAnswer],
    layout: "BaseLayout",
  });
});
