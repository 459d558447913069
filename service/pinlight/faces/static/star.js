// A star's view: recording a judgement with a member's token.
"use strict";

const form = document.getElementById("judge-form");
const TOKEN = "pinlight-token";

const stored = () => {
  try { return sessionStorage.getItem(TOKEN) || ""; } catch { return ""; }
};

form.closest("details").hidden = false;
form.elements.token.value = stored();

form.addEventListener("submit", async (event) => {
  event.preventDefault();
  const { standing, scope, reason, evidence, token } = Object.fromEntries(new FormData(form));
  const [kind, ...where] = scope.split(" ");
  const body = { standing, reason, evidence: evidence.trim() ? [evidence.trim()] : [] };
  if (kind) body[kind] = where.join(" ");
  const line = form.querySelector("[role=alert]");
  line.hidden = true;
  try {
    const reply = await fetch(form.dataset.address, {
      method: "POST",
      headers: { "Content-Type": "application/json", Authorization: `Bearer ${token.trim()}` },
      body: JSON.stringify(body),
    });
    if (!reply.ok) throw new Error((await reply.json()).detail || `status ${reply.status}`);
    try { sessionStorage.setItem(TOKEN, token.trim()); } catch { /* asked again next time, then */ }
    location.reload();
  } catch (error) {
    line.textContent = `Not recorded: ${error.message}`;
    line.hidden = false;
  }
});
