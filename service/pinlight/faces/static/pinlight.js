// What every view shares: the plots' styles under a strict policy, light and dark, copying, progress.
"use strict";

// Bokeh makes <style> elements; the policy lets in those that carry this page's nonce.
(() => {
  const { nonce } = document.currentScript;
  const create = document.createElement.bind(document);
  document.createElement = (name, options) => {
    const element = create(name, options);
    if (name === "style") element.nonce = nonce;
    return element;
  };
})();

const pinlight = {
  root: document.documentElement,

  get scheme() {
    const chosen = this.root.dataset.scheme;
    return chosen || (matchMedia("(prefers-color-scheme: dark)").matches ? "dark" : "light");
  },

  remembered() {
    try { return localStorage.getItem("pinlight-scheme"); } catch { return null; }
  },

  switchScheme(scheme) {
    this.root.dataset.scheme = scheme;
    try { localStorage.setItem("pinlight-scheme", scheme); } catch { /* not remembered, then */ }
    dispatchEvent(new Event("pinlight-scheme"));
  },

  busy(text) {
    const line = document.querySelector(".progress");
    if (!line) return;
    line.classList.toggle("busy", Boolean(text));
    line.textContent = text || "";
  },

  async copy(button) {
    const text = document.getElementById(button.dataset.copy).textContent;
    try {
      await navigator.clipboard.writeText(text);
    } catch {  // an address without TLS has no clipboard: the text is selected for the keyboard
      getSelection().selectAllChildren(document.getElementById(button.dataset.copy));
      button.textContent = "Selected";
      return;
    }
    button.textContent = "Copied";
    setTimeout(() => { button.textContent = "Copy"; }, 1500);
  },
};

const remembered = pinlight.remembered();
if (remembered === "light" || remembered === "dark") pinlight.root.dataset.scheme = remembered;

addEventListener("DOMContentLoaded", () => {
  const button = document.querySelector("[data-scheme-switch]");
  const tell = () => { button.textContent = pinlight.scheme === "dark" ? "Light" : "Dark"; };
  button.hidden = false;
  button.addEventListener("click", () => pinlight.switchScheme(pinlight.scheme === "dark" ? "light" : "dark"));
  addEventListener("pinlight-scheme", tell);
  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => dispatchEvent(new Event("pinlight-scheme")));
  tell();
  document.addEventListener("click", (event) => {
    const copy = event.target.closest("[data-copy]");
    if (copy) pinlight.copy(copy);
  });
  const night = document.getElementById("ask-night");
  if (night) {
    night.addEventListener("submit", () => pinlight.busy("Planning the night"));
    night.elements.array.addEventListener("change", () => {  // other modes, other stations
      const values = new URLSearchParams({ array: night.elements.array.value });
      for (const name of ["targets", "night"]) {
        if (night.elements[name].value) values.set(name, night.elements[name].value);
      }
      location.search = values;
    });
  }
  addEventListener("pageshow", () => pinlight.busy(""));
});
