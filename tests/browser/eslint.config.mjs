// Rules for the scripts of the explorer; the globals are all that they use of the browser.
import js from "@eslint/js";

const globals = [
  "Blob", "DecompressionStream", "ImageData", "Response", "addEventListener", "atob",
  "clearTimeout", "document", "getSelection", "matchMedia", "navigator", "performance",
  "setTimeout", "window",
];

export default [
  js.configs.recommended,
  {
    languageOptions: {
      ecmaVersion: 2022,
      sourceType: "script",
      globals: Object.fromEntries(globals.map((name) => [name, "readonly"])),
    },
    rules: {
      complexity: ["error", 15],
      eqeqeq: "error",
      "max-len": ["error", { code: 110 }],
      "no-shadow": "error",
      "no-var": "error",
      "prefer-const": "error",
    },
  },
];
