// Which view is shown, whether the line to the service stands, and who asks for the token.

import { say } from "./elements.js";
import { CampaignView } from "./campaign.js";
import { Line } from "./line.js";
import { ListView } from "./list.js";
import { RunView } from "./run.js";
import { tokenForm } from "./token.js";

const POLL_MILLISECONDS = 2000; // counters move with every batch, and only looks are events
const HIDDEN_POLL_MILLISECONDS = 15000; // keeps the title of a tab in the background true

const line = new Line();
const content = document.getElementById("content");
const trail = document.getElementById("trail");
const connection = document.getElementById("connection");
let view = null;
let since = null;
let timer = 0;

// The view for an address: #/ , #/runs/<id> , #/campaigns/<name>
function viewOf(hash) {
  const [, kind, ...rest] = hash.replace(/^#/, "").split("/");
  const name = decodeURIComponent(rest.join("/"));
  if (kind === "runs" && name) return new RunView(line, name);
  if (kind === "campaigns" && name) return new CampaignView(line, name);
  return new ListView(line);
}

function go() {
  view?.end();
  view = viewOf(location.hash);
  content.replaceChildren(view.root);
  trail.replaceChildren(...view.trail());
  document.title = "Slackwater";
  line.watch(view.events);
  view.load();
  rearm();
  scrollTo(0, 0);
}

function stands(live) {
  connection.classList.toggle("lost", !live);
  if (live) {
    say(connection, "Live");
    since = null;
    view.load(); // whatever happened meanwhile is read anew, as a whole: nothing is counted twice
    return;
  }
  since ??= new Date();
  say(connection, `No connection since ${since.toLocaleTimeString()}; what is shown is of before. Trying again.`);
}

function askToken() {
  if (content.querySelector("form.token")) return;
  content.replaceChildren(tokenForm(line, go));
  content.querySelector("input").focus();
}

function tick() {
  if (line.live || document.hidden) view.tick();
  rearm();
}

function rearm() {
  clearTimeout(timer);
  timer = setTimeout(tick, document.hidden ? HIDDEN_POLL_MILLISECONDS : POLL_MILLISECONDS);
}

// Browsers open few connections to one service: a tab that nobody looks at gives its own back.
function shownOrHidden() {
  if (document.hidden) line.pause();
  else line.resume();
  rearm();
}

function otherTheme() {
  const root = document.documentElement;
  const dark = root.dataset.theme ? root.dataset.theme === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
  root.dataset.theme = dark ? "light" : "dark";
  try { localStorage.setItem("slackwater-theme", root.dataset.theme); } catch { /* kept for this page only */ }
  view.recolour();
}

// Paper is white: charts are drawn with the colours of the light page while it prints.
function printing(begins) {
  const root = document.documentElement;
  if (begins) [root.dataset.before, root.dataset.theme] = [root.dataset.theme || "", "light"];
  else if (root.dataset.before) root.dataset.theme = root.dataset.before;
  else delete root.dataset.theme;
  view.recolour();
}

line.addEventListener("live", () => stands(true));
line.addEventListener("lost", () => stands(false));
line.addEventListener("news", ({ detail }) => view.news(detail));
line.addEventListener("token", askToken);
addEventListener("hashchange", () => { go(); content.focus(); });
document.addEventListener("visibilitychange", shownOrHidden);
addEventListener("beforeprint", () => printing(true));
addEventListener("afterprint", () => printing(false));
document.getElementById("theme").addEventListener("click", otherTheme);
matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => view.recolour());
document.querySelector(".skip").addEventListener("click", (event) => {
  event.preventDefault(); // the address says which view is shown
  content.focus();
});
go();
