"use strict";
window.addEventListener("load", () => {
  SwaggerUIBundle({
    url: "/openapi.json",
    dom_id: "#reference",
    deepLinking: true,
    validatorUrl: null,
    displayRequestDuration: true,
    persistAuthorization: false,
  });
});
