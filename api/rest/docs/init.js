window.ui = SwaggerUIBundle({
  url: "/openapi.json",
  dom_id: "#api",
  deepLinking: true,
  validatorUrl: null,
  tryItOutEnabled: false,
});
