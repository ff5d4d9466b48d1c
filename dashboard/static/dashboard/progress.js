/* Follows a recompute request and offers the page anew when it has ended.

   Markup: an element with data-progress="address of the request's state", in it an element with data-words for the
   sentence, perhaps a <progress>, and a hidden link with data-reload. Without this script the page still says how the
   request stood when it was loaded, so nothing is lost on a reload. */
"use strict";

const SOONEST = 1000;
const LATEST = 15000;

function follow(place) {
  const words = place.querySelector("[data-words]");
  const reload = place.querySelector("[data-reload]");
  let wait = SOONEST;

  async function look() {
    let state;
    try {
      const answer = await fetch(place.dataset.progress, { headers: { Accept: "application/json" } });
      if (answer.redirected) {
        words.textContent = "You have been signed out.";
        reload.textContent = "Sign in again";
        reload.hidden = false;
        return;
      }
      if (!answer.ok) throw new Error(`The service answered ${answer.status}.`);
      state = await answer.json();
    } catch (problem) {
      words.textContent = "The service cannot be reached just now; still trying.";
      wait = Math.min(wait * 2, LATEST);
      setTimeout(look, wait);
      return;
    }
    if (words.textContent !== state.words) words.textContent = state.words;
    const bar = place.querySelector("progress");
    if (bar && state.total) {
      bar.max = state.total;
      bar.value = state.done;
    }
    if (state.ended) {
      if (bar) bar.remove();
      reload.hidden = false;
      return;
    }
    wait = Math.min(wait * 1.3, LATEST);
    setTimeout(look, wait);
  }

  setTimeout(look, wait);
}

document.querySelectorAll("[data-progress]").forEach(follow);
