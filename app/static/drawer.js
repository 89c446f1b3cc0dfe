export function mount() {}
export function update() {}
export function saved() {}
