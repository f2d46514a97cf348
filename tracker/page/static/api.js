// Requests to the server that served this page, and to nothing else.

export class Refused extends Error {
  constructor(status, facts) {
    super(facts.message || `the server answered with status ${status}`);
    this.status = status;
    this.facts = facts;
  }
}

async function answer(response) {
  const type = response.headers.get("content-type") || "";
  if (response.ok) return type.startsWith("application/json") ? response.json() : response;
  const facts = type.startsWith("application/json") ? await response.json() : { message: (await response.text()).slice(0, 300) };
  throw new Refused(response.status, facts);
}

async function ask(path, options) {
  let response;
  try {
    response = await fetch(path, { credentials: "same-origin", ...options });
  } catch (error) {
    if (error.name === "AbortError") throw error;
    throw new Refused(0, { message: "The server does not answer. Has fallrise been closed in the terminal?" });
  }
  return answer(response);
}

export const get = (path, signal) => ask(path, { signal });

export const post = (path, body = {}) =>
  ask(path, { method: "POST", headers: { "content-type": "application/json" }, body: JSON.stringify(body) });

export const remove = (path) => ask(path, { method: "DELETE" });

// A file goes up as a raw body with XMLHttpRequest: fetch cannot tell how far it is.
export function upload(file, kind, onProgress) {
  const request = new XMLHttpRequest();
  const done = new Promise((resolve, reject) => {
    request.open("POST", `/api/uploads`);
    request.setRequestHeader("content-type", "application/octet-stream");
    request.setRequestHeader("x-kind", kind);
    request.setRequestHeader("x-name", encodeURIComponent(file.name));
    request.upload.onprogress = (event) => onProgress(event.loaded, event.total);
    request.onload = () => {
      let facts = {};
      try { facts = JSON.parse(request.responseText); } catch { facts = { message: request.responseText.slice(0, 300) }; }
      if (request.status === 200) resolve(facts);
      else reject(new Refused(request.status, facts));
    };
    request.onerror = () => reject(new Refused(0, { message: "The upload broke off." }));
    request.onabort = () => reject(new Refused(0, { message: "The upload was cancelled." }));
    request.send(file);
  });
  return { done, cancel: () => request.abort() };
}
