"use strict";
for (const figure of document.querySelectorAll(".flick")) {
  const button = figure.querySelector("button.turn");
  const auto = figure.querySelector("button.auto");
  const shown = figure.querySelector(".shown");
  const names = { first: figure.dataset.first, second: figure.dataset.second };
  let timer = null;
  const show = (which) => {
    figure.dataset.shown = which;
    shown.textContent = names[which];
    button.setAttribute("aria-pressed", which === "second" ? "true" : "false");
    figure.querySelector("img.first").setAttribute("aria-hidden", which === "second" ? "true" : "false");
    figure.querySelector("img.second").setAttribute("aria-hidden", which === "first" ? "true" : "false");
  };
  const turn = () => show(figure.dataset.shown === "first" ? "second" : "first");
  button.addEventListener("click", turn);
  auto.addEventListener("click", () => {
    if (timer === null) { timer = setInterval(turn, 600); } else { clearInterval(timer); timer = null; }
    auto.setAttribute("aria-pressed", timer === null ? "false" : "true");
  });
  show("first");
}
const theme = document.querySelector("button.theme");
const dark = () => {
  const set = document.documentElement.dataset.theme;
  return set ? set === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
};
const label = () => { theme.textContent = dark() ? "Light page" : "Dark page"; };
theme.addEventListener("click", () => { document.documentElement.dataset.theme = dark() ? "light" : "dark"; label(); });
label();
