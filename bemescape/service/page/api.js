// The service, as functions. Refusals become errors whose message is the service's sentence.
import { unpacked } from "./buffers.js";

export class Refused extends Error {
  constructor(status, body) {
    super(body.detail ?? `the service answered ${status}`);
    this.status = status;
    this.body = body;
  }
}

async function ask(method, path, { json, form } = {}) {
  const options = { method, credentials: "same-origin", headers: {} };
  if (json !== undefined) {
    options.body = JSON.stringify(json);
    options.headers["Content-Type"] = "application/json";
  }
  if (form !== undefined) options.body = form;
  let answer;
  try {
    answer = await fetch(`api/${path}`, options);
  } catch {
    throw new Refused(0, { detail: "the service does not answer; is it still running?" });
  }
  if (!answer.ok) {
    const body = await answer.json().catch(() => ({}));
    if (answer.status === 401) window.dispatchEvent(new Event("signed-out"));
    throw new Refused(answer.status, body);
  }
  return answer;
}

const json = async (answer) => (await answer).json();
const binary = async (answer) => unpacked(await (await answer).arrayBuffer());

function formOf(file, fields) {
  const form = new FormData();
  for (const [key, value] of Object.entries(fields)) form.append(key, value);
  form.append("file", file, file.name);
  return form;
}

export const session = () => json(ask("GET", "session"));
export const signIn = (token) => ask("POST", "session", { json: { token } });
export const demos = () => json(ask("GET", "demos"));
export const useDemo = (name) => json(ask("POST", `demos/${name}`));
export const upload = (file, unit, heal) => json(ask("POST", "surfaces", { form: formOf(file, { unit, heal }) }));
export const uploadPositions = (file) => json(ask("POST", "positions", { form: formOf(file, {}) }));
export const surfaces = () => json(ask("GET", "surfaces"));
export const surface = (id) => json(ask("GET", `surfaces/${id}`));
export const deleteSurface = (id, withRuns) => ask("DELETE", `surfaces/${id}?with_runs=${withRuns}`);
export const surfaceMesh = (id) => binary(ask("GET", `surfaces/${id}/mesh`));
export const placeWindows = (id, windows) => binary(ask("POST", `surfaces/${id}/windows`, { json: { window: windows } }));
export const runs = () => json(ask("GET", "runs"));
export const run = (id) => json(ask("GET", `runs/${id}`));
export const startRun = (order) => json(ask("POST", "runs", { json: order }));
export const cancelRun = (id) => json(ask("POST", `runs/${id}/cancel`));
export const deleteRun = (id) => ask("DELETE", `runs/${id}`);
export const summary = (id) => json(ask("GET", `runs/${id}/summary`));
export const runMesh = (id) => binary(ask("GET", `runs/${id}/mesh`));
export const slowRegions = (id, part) => json(ask("GET", `runs/${id}/slow_regions?wall_fraction=${part}`));
export const section = (id, point, normal) =>
  binary(ask("POST", `runs/${id}/section`, { json: { point_um: point, normal, pixels: 128 } }));
export const comparison = (ids) => json(ask("GET", `comparison?${ids.map((id) => `run=${id}`).join("&")}`));
export const studies = () => json(ask("GET", "studies"));
export const study = (id) => json(ask("GET", `studies/${id}`));
export const startStudy = (order) => json(ask("POST", "studies", { json: order }));
export const deleteStudy = (id) => ask("DELETE", `studies/${id}`);
export const studyStatistics = (id) => json(ask("GET", `studies/${id}/statistics`));
export const surfacePicture = async (id, body) => (await ask("POST", `surfaces/${id}/picture`, { json: body })).blob();
export const fileUrl = (id, name) => `api/runs/${id}/files/${name}`;

/** Progress of a run; answers with what ends the listening. */
export function watch(id, { onRun, onProgress, onLost }) {
  const source = new EventSource(`api/runs/${id}/events`);
  source.addEventListener("run", (event) => {
    const record = JSON.parse(event.data);
    onRun(record);
    const over = ["done", "failed", "cancelled", "deleted"].includes(record.state);
    if (over && !["waiting", "running"].includes(record.pictures)) source.close();
  });
  source.addEventListener("progress", (event) => onProgress(JSON.parse(event.data)));
  source.addEventListener("error", () => onLost?.());
  return () => source.close();
}
