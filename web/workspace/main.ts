// Pages of the workspace work without this script; it keeps the study page up
// to date while runs arrive and selects links that are there to be copied.

async function renew(live: HTMLElement): Promise<void> {
  const response = await fetch(location.href, { headers: { Accept: "text/html" } });
  if (!response.ok) return;
  const page = new DOMParser().parseFromString(await response.text(), "text/html");
  const fresh = page.getElementById("live");
  if (!fresh) return;
  const at = scrollY;
  live.replaceChildren(...Array.from(fresh.childNodes));
  live.dataset["renewed"] = String(Number(live.dataset["renewed"] ?? "0") + 1);
  scrollTo(0, at);
}

const live = document.getElementById("live");
const address = live?.dataset["live"];
if (live && address) {
  const events = new EventSource(address);
  events.onmessage = () => void renew(live);
  addEventListener("pagehide", () => events.close());
}

for (const field of document.querySelectorAll<HTMLInputElement>("input.link")) {
  field.addEventListener("focus", () => field.select());
}
